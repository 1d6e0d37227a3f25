# make forecast   answer for the demo record: the program alone is installed, then run
# make test       fast tests and a sample of the slow ones
# make test-all   every test
# make lint       style
# make docs       run the examples of the documents
# make bench      speed
# make clean      remove everything that is made here
#
# Needs Python 3.11 or later as python3 (or PYTHON=...).

PYTHON ?= python3
VENV ?= .venv
BIN := $(VENV)/bin
DEMO := data_synth/skerry-upwave-developing.csv
DISTANCE := 1500
# every process here is one of two on two cores: more threads would only get in each other's way
export OMP_NUM_THREADS := 1
export OPENBLAS_NUM_THREADS := 1

.PHONY: forecast test test-all lint docs bench clean

forecast: $(VENV)/.core
	$(BIN)/trikymia score $(DEMO) --distance $(DISTANCE) --spread 4 --sensor fixed

# Slow tests: every one is run by test-all; here one in four, chosen by name, always the same.
test: $(VENV)/.test
	$(BIN)/python -m pytest -n 2 --slow-sample 4 --ignore tests/test_documents.py

test-all: $(VENV)/.test
	$(BIN)/python -m pytest -n 2

lint: $(VENV)/.test
	$(BIN)/ruff check .
	$(BIN)/ruff format --check .

docs: $(VENV)/.test
	$(BIN)/python -m pytest tests/test_documents.py

bench: $(VENV)/.test
	for file in benchmarks/*.py; do echo "== $$file" && $(BIN)/python $$file || exit 1; done

clean:
	rm -rf $(VENV) build dist *.egg-info .pytest_cache .ruff_cache .hypothesis
	find . -name __pycache__ -type d -prune -exec rm -rf {} +

# Stamps: a second call installs nothing, a change of pyproject.toml installs again.
$(VENV)/bin/python:
	$(PYTHON) -c 'import sys; sys.exit(sys.version_info < (3, 11) and "Python 3.11 or later is needed")'
	$(PYTHON) -m venv $(VENV)

$(VENV)/.core: pyproject.toml | $(VENV)/bin/python
	$(BIN)/python -m pip install --quiet --disable-pip-version-check --editable .
	touch $@

$(VENV)/.test: pyproject.toml | $(VENV)/bin/python
	$(BIN)/python -m pip install --quiet --disable-pip-version-check --editable '.[test]'
	touch $@ $(VENV)/.core
