# Two commands serve a newcomer: `make demo` and `make test`. The others serve contributors.
PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin
READY := $(VENV)/.ready

.PHONY: demo test check bench format clean

demo: $(READY)
	$(BIN)/condyle demo demo_out

test: $(READY)
	$(BIN)/python -m pytest

check: $(READY)
	$(BIN)/ruff format --check .
	$(BIN)/ruff check .
	$(BIN)/python tests/link_tree.py && $(BIN)/mypy
	$(BIN)/python -m pytest -q -m "not slow and not real"

bench: $(READY)
	$(BIN)/python benchmarks/real_recordings.py
	OPENBLAS_NUM_THREADS=1 $(BIN)/python benchmarks/solver_speed.py full_body 1000
	OPENBLAS_NUM_THREADS=1 $(BIN)/python benchmarks/solver_speed.py lower_limbs 4500
	$(BIN)/python benchmarks/solver_growth.py
	$(BIN)/python benchmarks/trial_estimates.py 40
	$(BIN)/python benchmarks/calibration_coverage.py 30
	$(BIN)/python benchmarks/calibration.py 40
	$(BIN)/python benchmarks/calibration_real.py

format: $(READY)
	$(BIN)/ruff format .
	$(BIN)/ruff check --fix .

$(READY): pyproject.toml
	$(PYTHON) -m venv $(VENV)
	$(BIN)/python -m pip install --quiet --upgrade pip
	$(BIN)/python -m pip install --quiet --editable ".[dev]"
	touch $(READY)

clean:
	rm -rf $(VENV) build demo_out
