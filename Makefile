# Every target makes .venv by itself, from the versions in constraints.txt; after that nothing asks the network, but
# for the first tests that want a broker: they fetch its jars, where Java and Maven are installed.

SHELL := /bin/bash
PYTHON ?= python3
BIN := .venv/bin
READY := .venv/.ready
WORKERS ?= 2
MESSAGES ?= 20000000
KILLS ?= 200
SEED ?= 7

.PHONY: demo test lint bench proof soak chaos clean

demo: $(READY)
	$(BIN)/bedload demo

test: $(READY)
	$(BIN)/python -m pytest -n $(WORKERS) $(TESTS)

lint: $(READY)
	$(BIN)/ruff check .
	$(BIN)/ruff format --check .
	$(BIN)/mypy

bench: $(READY)
	$(BIN)/python -m tests.bench

proof: $(READY)
	$(BIN)/python -m tests.evidence

soak: $(READY)
	$(BIN)/python -m tests.soak --messages $(MESSAGES)

chaos: $(READY)
	$(BIN)/python -m tests.chaos --kills $(KILLS) --seed $(SEED)

clean:
	rm -rf .venv .mypy_cache .ruff_cache .pytest_cache .hypothesis build dist
	find . -name __pycache__ -type d -prune -exec rm -rf {} +

$(READY): pyproject.toml constraints.txt
	@$(PYTHON) -c 'import sys; sys.exit(not (3, 11) <= sys.version_info[:2] <= (3, 13))' || \
	  { echo "make: $(PYTHON) is not Python 3.11, 3.12 or 3.13; say which one to use: make PYTHON=python3.12" >&2; exit 1; }
	@$(PYTHON) -c 'import ensurepip, venv' 2>/dev/null || \
	  { echo "make: $(PYTHON) cannot make a virtual environment; install its venv package (Debian: apt-get install python3-venv)" >&2; exit 1; }
	rm -rf .venv
	$(PYTHON) -m venv .venv
	$(BIN)/pip install --quiet --disable-pip-version-check --constraint constraints.txt setuptools hatchling editables
	$(BIN)/pip install --quiet --disable-pip-version-check --constraint constraints.txt --no-build-isolation \
	  --editable '.[dev,parquet]'
	touch $@
