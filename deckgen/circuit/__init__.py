"""The frozen circuit, the reader of flat netlists, and the netlists that deckgen composes itself."""
