# Every target makes its own environment in .venv; all it needs is Python 3.11 or later, make and git.
PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin
READY := $(VENV)/.ready

.PHONY: demo test lint bench accuracy soak-test wheel clean

demo: $(READY)           ## a virtual night on the mock bench, ending in a report
	$(BIN)/kneemap run plans/demo_night.yaml --into runs

test: $(READY)           ## the whole suite, in its short form
	$(BIN)/python -m pytest

lint: $(READY)           ## style and strict types
	$(BIN)/ruff check .
	$(BIN)/ruff format --check .
	$(BIN)/mypy

bench: $(READY)          ## speed and memory, as ratios to a bare loop in the same run
	$(BIN)/python tests/benchmarks/run_all.py

accuracy: $(READY)       ## a few hundred seeded mock benches against their own truth
	$(BIN)/python tests/studies/accuracy.py

soak-test: $(READY)      ## the long campaigns: kills, power cuts, faults, watchdog
	$(BIN)/python -m pytest -m soak

wheel: $(READY)
	$(BIN)/python -m build --wheel

$(READY): pyproject.toml
	@$(PYTHON) -c 'import sys; sys.exit(sys.version_info < (3, 11))' || \
	  { echo "kneemap needs Python 3.11 or later; '$(PYTHON)' is older. Name another: make PYTHON=python3.12 $(MAKECMDGOALS)"; exit 1; }
	@$(PYTHON) -c 'import ensurepip, venv' 2>/dev/null || \
	  { echo "This Python cannot make environments; install its venv package (on Debian: python3-venv)."; exit 1; }
	$(PYTHON) -m venv $(VENV)
	$(BIN)/python -m pip install --quiet --disable-pip-version-check --editable '.[dev]'
	@touch $(READY)

clean:
	rm -rf $(VENV) build dist .mypy_cache .pytest_cache .ruff_cache
