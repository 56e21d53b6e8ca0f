# Everything a newcomer and a build machine need: each target sets up by itself.
#   make setup    build .venv          make test    format, lint, types, tests
#   make demo     see it work          make bench   budgets as ratios inside one run
#   make soak     the long runs        ONCE=1       let the demo end by itself
#   make figures  the README's figures, from the demo as it comes out

PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin

# The demo needs no test libraries; without them an empty clone is ready in half the time.
READY := $(VENV)/.ready
READY_TO_TEST := $(VENV)/.ready-to-test

# What is imported is compiled then; compiling all of every library first takes longer.
INSTALL = $(BIN)/python -m pip install --quiet --disable-pip-version-check --no-compile --editable

.PHONY: setup demo test bench soak figures

setup: $(READY_TO_TEST)

$(BIN)/python:
	@$(PYTHON) -c 'import sys; sys.exit(sys.version_info < (3, 11) and \
	  "oddbranch needs Python 3.11 or later; say which with make PYTHON=python3.11")'
	$(PYTHON) -m venv $(VENV)

$(READY): pyproject.toml | $(BIN)/python
	$(INSTALL) .
	@touch $@

$(READY_TO_TEST): pyproject.toml | $(BIN)/python
	$(INSTALL) '.[dev]'
	@touch $@ $(READY)

demo: $(READY)
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

figures: $(READY)
	$(BIN)/python .ci/readme.py
