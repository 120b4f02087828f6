"""Reports: one JSON document of plain values, and every other report made from that document alone."""
