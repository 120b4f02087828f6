"""``python -m deckgen``."""

from deckgen.cli.main import main

main()
