"""Pure numbers: arrays and frozen configurations in, arrays or named tuples out."""
