"""Published formulas, one function each, with source, range and example."""
