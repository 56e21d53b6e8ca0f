# Everything a newcomer and a build machine need: each target sets up by itself.
#   make setup    build .venv          make test    format, lint, types, tests
#   make demo     see it work          make bench   budgets as ratios inside one run
#   make soak     the long runs        ONCE=1       let the demo end by itself

PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin
STAMP := $(VENV)/.set-up

.PHONY: setup demo test bench soak

setup: $(STAMP)

$(STAMP): pyproject.toml
	@$(PYTHON) -c 'import sys; sys.exit(sys.version_info < (3, 11) and \
	  "oddbranch needs Python 3.11 or later; say which with make PYTHON=python3.11")'
	test -x $(BIN)/python || $(PYTHON) -m venv $(VENV)
	$(BIN)/python -m pip install --quiet --disable-pip-version-check --editable '.[dev]'
	@touch $(STAMP)

demo: setup
	$(BIN)/oddbranch demo $(if $(ONCE),--once)

test: setup
	$(BIN)/ruff format --check .
	$(BIN)/ruff check .
	$(BIN)/mypy
	$(BIN)/pytest

bench: setup
	$(BIN)/pytest -m bench --capture=no tests

soak: setup
	$(BIN)/pytest -m soak --capture=no tests
