# The memory of the project: each target sets up what it needs, a second run starts in seconds.
PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin
READY := $(VENV)/.ready

# One thread a process: the statistics run in many small processes, and two cores are shared.
export OMP_NUM_THREADS ?= 1
export OPENBLAS_NUM_THREADS ?= 1

.PHONY: setup demo test lint bench study clean

setup: $(READY)

$(READY): pyproject.toml constraints.txt
	$(PYTHON) -m venv $(VENV)
	$(BIN)/pip install --quiet --constraint constraints.txt --editable '.[test]'
	touch $(READY)

demo: $(READY)
	$(BIN)/leakpipe rehearse shared/demo/scenario.yaml demo-out/recordings --keep
	$(BIN)/leakpipe run configs/demo.yaml

test: $(READY)
	$(BIN)/python -m pytest

lint: $(READY)
	$(BIN)/ruff check .
	$(BIN)/ruff format --check .
	$(BIN)/mypy

bench: $(READY)
	$(BIN)/python -m benchmarks $(ONLY)

study: $(READY)
	$(BIN)/python -m studies $(ONLY)

clean:
	rm -rf $(VENV) demo-out .pytest_cache .mypy_cache .ruff_cache .hypothesis
