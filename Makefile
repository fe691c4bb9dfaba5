# make demo, make test: each does everything on a bare machine with Python 3.11 or later.
PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin

.PHONY: demo test test-all format bench clean

$(VENV)/.stamp-installed: pyproject.toml
	$(PYTHON) -c 'import sys; sys.exit(sys.version_info < (3, 11) and "Python 3.11 or later is needed: make PYTHON=python3.11")'
	$(PYTHON) -m venv $(VENV) || (echo "on Debian: apt-get install python3-venv" && exit 1)
	$(BIN)/pip install --quiet --disable-pip-version-check -e '.[test,lint]'
	touch $@

demo: $(VENV)/.stamp-installed   ## three briefs, from prediction to picture
	OMP_NUM_THREADS=1 OPENBLAS_NUM_THREADS=1 $(BIN)/syzygraph demo

test: $(VENV)/.stamp-installed   ## lint, types, then all tests but the slow ones
	$(BIN)/ruff check .
	$(BIN)/ruff format --check .
	$(BIN)/mypy
	OMP_NUM_THREADS=1 OPENBLAS_NUM_THREADS=1 $(BIN)/pytest -n 2 --dist worksteal -m 'not slow'

test-all: $(VENV)/.stamp-installed   ## the slow ones too
	OMP_NUM_THREADS=1 OPENBLAS_NUM_THREADS=1 $(BIN)/pytest -n 2 --dist worksteal

format: $(VENV)/.stamp-installed
	$(BIN)/ruff check --fix . ; $(BIN)/ruff format .

bench: $(VENV)/.stamp-installed  ## both routes of every benchmark in one run
	for script in benchmarks/bench_*.py; do $(BIN)/python $$script || exit 1; done

clean:
	rm -rf $(VENV) build dist *.egg-info .pytest_cache .ruff_cache .mypy_cache .hypothesis demo_output
