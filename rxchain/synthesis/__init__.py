"""Captures with known truth: messages, the emissions that carry them, what the air does to them, and scenes of many.

The truth of an emission is its message in the units in which a linear receiver delivers it.
"""
