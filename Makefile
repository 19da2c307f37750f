# Everything from a clean clone: `make demo`, `make test`. Each sets up what it needs in $(VENV) first.
PYTHON ?= python3
VENV ?= .venv
BIN := $(VENV)/bin
ifeq ($(OS),Windows_NT)
BIN := $(VENV)/Scripts
endif
SOURCES := $(shell find sweeprig drivers configs -type f -not -path '*/__pycache__/*') pyproject.toml README.md
ONLY ?=
FULL ?=

.PHONY: demo test lint figures schemas clean

demo: $(VENV)/.installed
	$(BIN)/sweeprig run demo --runs runs

test: $(VENV)/.dev
	$(BIN)/pytest -n 2 -rs -p no:cacheprovider

lint: $(VENV)/.dev
	$(BIN)/ruff check .
	$(BIN)/ruff format --check .
	$(BIN)/mypy

figures: $(VENV)/.dev
	ONLY=$(ONLY) FULL=$(FULL) $(BIN)/python tests/figures/run.py

schemas: $(VENV)/.dev
	$(BIN)/python -m sweeprig.job.schemas

clean:
	rm -rf $(VENV) build dist .mypy_cache .ruff_cache

$(VENV)/.tools: constraints.txt
	$(PYTHON) -m venv $(VENV)
	$(BIN)/python -m pip install --quiet --disable-pip-version-check --upgrade pip
	$(BIN)/python -m pip install --quiet --disable-pip-version-check --constraint constraints.txt hatchling
	@touch $@

# What is installed, and so what is tested, is the wheel.
$(VENV)/.installed: $(VENV)/.tools $(SOURCES)
	rm -rf dist
	$(BIN)/python -m pip wheel --quiet --disable-pip-version-check --no-deps --no-build-isolation --wheel-dir dist .
	$(BIN)/python -m pip install --quiet --disable-pip-version-check --constraint constraints.txt dist/sweeprig-*.whl
	$(BIN)/python -m pip install --quiet --disable-pip-version-check --force-reinstall --no-deps dist/sweeprig-*.whl
	@touch $@

$(VENV)/.dev: $(VENV)/.installed
	$(BIN)/python -m pip install --quiet --disable-pip-version-check --constraint constraints.txt "$$(ls dist/sweeprig-*.whl)[dev]"
	@touch $@
