# basinwright: every job of the project, each from a bare clone.
PYTHON ?= python3
BIN := .venv/bin
OUT ?= basinwright-demo

.PHONY: demo test lint format bench bench-large docs packages mutants lock clean

demo: .venv/runtime-ready
	$(BIN)/basinwright demo $(OUT)

test: .venv/dev-ready
	$(BIN)/python -m pytest -n auto --dist loadgroup $(PYTEST_ARGS)

lint: .venv/dev-ready
	$(BIN)/ruff format --check src tests sample_data
	$(BIN)/ruff check src tests sample_data
	$(BIN)/mypy
	$(BIN)/lint-imports

format: .venv/dev-ready
	$(BIN)/ruff format src tests sample_data
	$(BIN)/ruff check --fix src tests sample_data

bench: .venv/dev-ready
	$(BIN)/python tests/bench/bench.py --out bench.json

# Wheel and source distribution in bare environments of every supported Python that is here: a quarter of an hour.
packages: .venv/dev-ready
	.ci/packages

# 1,024 million cells, made and processed by tiles: about 60 GB of disk. BENCH_LARGE="--side 8000" for a look.
bench-large: .venv/dev-ready
	$(BIN)/python tests/bench/large.py $(BENCH_LARGE)

# The generated pages of docs/.
docs: .venv/dev-ready
	PYTHONPATH=tests $(BIN)/python -m docs.pages

# Whether the published cases notice a slip in a formula: about half an hour, writes docs/mutation.md.
mutants: .venv/dev-ready
	PYTHONPATH=tests $(BIN)/python -m mutation.mutate

# The lock files: versions and hashes only. Needs uv (any recent one) on PATH, or UV=/path/to/uv.
UV ?= uv
LOCK := $(UV) pip compile pyproject.toml --universal --python-version 3.11 --generate-hashes --no-header --quiet
lock:
	$(LOCK) --group build -o requirements.lock
	$(LOCK) --group build --group dev -c requirements.lock -o requirements-dev.lock

.venv/bin/python:
	@$(PYTHON) -c 'import sys; sys.exit(sys.version_info < (3, 11))' || \
		{ echo "basinwright needs Python 3.11 or newer: make PYTHON=/path/to/python3.11 $(MAKECMDGOALS)"; exit 1; }
	$(PYTHON) -m venv .venv

PIP := $(BIN)/python -m pip --disable-pip-version-check --quiet install
OURSELVES := $(PIP) --no-deps --no-build-isolation --editable .

.venv/runtime-ready: requirements.lock pyproject.toml | .venv/bin/python
	@echo "Installing basinwright and its libraries into .venv (a few minutes the first time) ..."
	$(PIP) --require-hashes -r requirements.lock
	$(OURSELVES)
	@touch $@

.venv/dev-ready: requirements-dev.lock pyproject.toml | .venv/bin/python
	@echo "Installing basinwright, its libraries and the developers' tools into .venv ..."
	$(PIP) --require-hashes -r requirements-dev.lock
	$(OURSELVES)
	@touch $@ .venv/runtime-ready

clean:
	rm -rf .venv build dist bench.json bench-large.json $(OUT)
