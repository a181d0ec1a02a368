# Two commands for a fresh machine: `make demo` and `make test`. Both install into .venv first.
PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin

.PHONY: demo test lint bench clean

demo: $(VENV)/.installed
	$(BIN)/lostwork demo --folder demo

test: $(VENV)/.installed-tests
	$(BIN)/ruff check .
	$(BIN)/ruff format --check .
	$(BIN)/mypy
	$(BIN)/python -m pytest $(PYTEST_OPTIONS)

lint: $(VENV)/.installed-tests
	$(BIN)/ruff check --fix .
	$(BIN)/ruff format .
	$(BIN)/mypy

bench: $(VENV)/.installed-tests
	for script in benchmarks/*.py; do echo "== $$script"; $(BIN)/python $$script || exit 1; done

clean:
	rm -rf demo build *.egg-info .pytest_cache .mypy_cache .ruff_cache .hypothesis .coverage htmlcov
	find . -name __pycache__ -type d -not -path './$(VENV)/*' -prune -exec rm -rf {} +

$(VENV)/bin/python:
	$(PYTHON) -c 'import sys; sys.exit("lostwork needs Python 3.11 or newer, this is " + sys.version.split()[0] if sys.version_info < (3, 11) else 0)'
	$(PYTHON) -m venv $(VENV)

$(VENV)/.installed: pyproject.toml | $(VENV)/bin/python
	$(BIN)/python -m pip install --quiet --upgrade pip
	$(BIN)/python -m pip install --quiet --editable .
	touch $@

$(VENV)/.installed-tests: pyproject.toml | $(VENV)/bin/python
	$(BIN)/python -m pip install --quiet --upgrade pip
	$(BIN)/python -m pip install --quiet --editable '.[test]'
	touch $@ $(VENV)/.installed
