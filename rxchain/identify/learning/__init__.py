"""Learns the table of evidence from synthesised windows; ``python -m rxchain.identify.learning VOICES``."""
