"""The heading field: pure numpy, over arrays of any shape."""
