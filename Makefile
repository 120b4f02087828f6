# make demo      install what is missing, then check the stages in stages/
# make test      install what is missing, then run every check and test

PYTHON_HERE := .venv/bin/python
SHELL := bash

.DEFAULT_GOAL := demo
.PHONY: setup demo test lint bench soak wheel clean

setup:
	@scripts/setup.sh

# Exit code 1 is a gap; the demo has some on purpose.
demo: setup
	@.venv/bin/deckgen check stages/ || { code=$$?; [ $$code -eq 1 ] || exit $$code; }

lint: setup
	$(PYTHON_HERE) -m ruff check .
	$(PYTHON_HERE) -m ruff format --check .
	$(PYTHON_HERE) -m mypy
	.venv/bin/lint-imports

# Tests that start no process run two at a time, whole files each, since files share what they set up.
test: lint
	$(PYTHON_HERE) -m pytest -n 2 --dist loadfile tests/unit
	$(PYTHON_HERE) -m pytest tests/outside tests/simulator deckgen/hand/formulas

# Ratios of speed, each measured within one run.
bench: setup
	$(PYTHON_HERE) scripts/bench.py

# The tests with long counts.
soak: setup
	DECKGEN_SOAK=1 $(PYTHON_HERE) -m pytest

wheel: setup
	$(PYTHON_HERE) -m build --no-isolation --wheel

clean:
	rm -rf .venv dist build .mypy_cache .ruff_cache .pytest_cache .hypothesis .import_linter_cache
	find . -name __pycache__ -type d -prune -exec rm -rf {} +
