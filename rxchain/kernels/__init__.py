"""Pure functions on arrays: filter design, fast convolution, phase ramps, smoothers, robust statistics."""
