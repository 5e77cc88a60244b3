"""Where audio and results go: files."""
