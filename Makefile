# Two commands: `make run` and `make test`. The rest is for contributors.

PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin
CHECKED := crestwatch tui shift rig sim acquisition dsp tests bench

.PHONY: run test lint bench pictures setup clean

run: $(VENV)/.runtime
	$(BIN)/crestwatch watch sim:hall

test: $(VENV)/.dev lint
	$(BIN)/python -m pytest

lint: $(VENV)/.dev
	$(BIN)/ruff format --check $(CHECKED)
	$(BIN)/ruff check $(CHECKED)
	$(BIN)/mypy
	$(BIN)/lint-imports

bench: $(VENV)/.dev
	$(BIN)/python -m bench

pictures: $(VENV)/.dev
	$(BIN)/python -m bench.pictures docs/pictures

setup: $(VENV)/.dev

$(VENV)/bin/python:
	@$(PYTHON) -c 'import sys; sys.exit(sys.version_info < (3, 11))' 2> /dev/null || \
	  { echo "crestwatch needs Python 3.11 or newer; name one with make PYTHON=python3.11"; exit 1; }
	@$(PYTHON) -m venv $(VENV) || \
	  { rm -rf $(VENV); echo "no virtual environment could be made with $(PYTHON); on Debian and Ubuntu: apt install python3-venv"; exit 1; }

$(VENV)/.runtime: $(VENV)/bin/python pyproject.toml
	$(BIN)/python -m pip install --quiet --disable-pip-version-check -e .
	@touch $@

$(VENV)/.dev: $(VENV)/bin/python pyproject.toml
	$(BIN)/python -m pip install --quiet --disable-pip-version-check -e '.[dev]'
	@touch $@ $(VENV)/.runtime

clean:
	rm -rf $(VENV) .cache .mypy_cache .ruff_cache .pytest_cache .hypothesis .import_linter_cache dist build
