# Planimeter: set up, run, test. Needs Python 3.11 or newer and a package manager.
PYTHON ?= $(shell for p in python3.13 python3.12 python3.11 python3 python3.14; do \
	$$p -c 'import sys; sys.exit(sys.version_info < (3, 11))' >/dev/null 2>&1 && echo $$p && break; done)
VENV := .venv
BIN := $(VENV)/bin
STAMP := $(VENV)/ready
PIP := $(BIN)/python -m pip install --quiet --disable-pip-version-check

.PHONY: setup run test soak bench lint clean libraries

setup: $(STAMP)

$(STAMP): pyproject.toml app/setup_check.py
	@test -n "$(PYTHON)" || { echo "Planimeter needs Python 3.11 or newer; none was found on the PATH." \
		"Install one, or name it: make setup PYTHON=..." >&2; exit 1; }
	@$(PYTHON) app/setup_check.py venv $(VENV)
	@echo "Installing Planimeter's packages into $(VENV) ..."
	@$(PIP) --editable '.[dev]'
	@$(PIP) --only-binary sqlglotc --editable '.[fast]' 2>/dev/null \
		|| echo "There is no compiled parser for this Python here: the plain one is used, which is slower and does the same."
	@touch $(STAMP)

libraries: $(STAMP)
	@$(BIN)/python app/setup_check.py libraries

run: libraries
	@$(BIN)/python -m app.demo

test: libraries
	@$(BIN)/python app/setup_check.py screen
	QT_QPA_PLATFORM=offscreen $(BIN)/python -m pytest

soak: libraries
	QT_QPA_PLATFORM=offscreen HYPOTHESIS_PROFILE=soak $(BIN)/python -m pytest -m soak

bench: libraries
	QT_QPA_PLATFORM=offscreen $(BIN)/python -m tests.bench

lint: $(STAMP)
	$(BIN)/ruff check .
	$(BIN)/ruff format --check .
	$(BIN)/mypy core
	$(BIN)/mypy app
	$(BIN)/lint-imports

clean:
	rm -rf $(VENV) build *.egg-info .pytest_cache .mypy_cache .ruff_cache .hypothesis .import_linter_cache
