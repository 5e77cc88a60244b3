"""Figures of each channel, each with one standard deviation: SNR, depth, offset, C/N0, level, power efficiency."""
