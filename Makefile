# Set-up included: each target makes its own virtual environment in .venv where there is none yet.
PYTHON ?= python3
BIN := .venv/bin
BELLS := demo_images/bells

.PHONY: demo test lint types bench clean

demo: .venv/ready
	$(BIN)/sanderling replay $(BELLS) --cell $(BELLS)/cell.toml --out out/bells --trajectory
	$(BIN)/sanderling score out/bells --cell $(BELLS)/cell.toml --truth $(BELLS)/truth.csv

test: .venv/ready
	$(BIN)/python -m pytest

lint: .venv/ready-dev
	$(BIN)/ruff check cameras pipeline tests

types: .venv/ready-dev
	$(BIN)/mypy

bench: .venv/ready
	for bench in tests/bench_*.py; do $(BIN)/python $$bench; done

.venv/ready: pyproject.toml
	$(PYTHON) -m venv .venv
	$(BIN)/python -m pip install --quiet --editable ".[test]"
	$(BIN)/python -c "import pipeline.outputs, pipeline.order.lookahead"  # compiles the kernels once
	touch $@

.venv/ready-dev: .venv/ready
	$(BIN)/python -m pip install --quiet --editable ".[dev]"
	touch $@

clean:
	rm -rf .venv out build *.egg-info
