"""From a circuit to the deck that measures it, and from the answer to measured quantities."""
