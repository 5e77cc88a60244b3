"""The commands: one file each. They import what they need when they run, so that asking for help stays quick."""
