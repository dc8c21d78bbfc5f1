# `make demo` and `make test` set up everything they need in .venv and need nothing else.
PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin
STAMP := $(VENV)/.installed

.PHONY: demo test lint benchmark clean

$(STAMP): pyproject.toml
	$(PYTHON) -m venv $(VENV)
	$(BIN)/python -m pip install --quiet --upgrade pip
	$(BIN)/python -m pip install --quiet --editable ".[dev]"
	touch $(STAMP)

demo: $(STAMP)
	$(BIN)/fathomline demo halden-a

test: $(STAMP)
	$(BIN)/python -m pytest

lint: $(STAMP)
	$(BIN)/ruff check .
	$(BIN)/ruff format --check .
	$(BIN)/mypy

benchmark: $(STAMP)
	$(BIN)/python -m benchmarks

clean:
	rm -rf $(VENV) halden-a dist build .pytest_cache .mypy_cache .ruff_cache .hypothesis
