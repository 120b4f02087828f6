"""The physical lines of a deck and of all it includes: what may be read, what counts, what never runs."""
