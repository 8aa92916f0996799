# Every target sets up what it needs: a virtual environment in .venv with the versions pinned in constraints.txt. The adapters of
# warehouses that are only compiled for get one of their own, .venv-portability.

PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin
READY := $(VENV)/.ready
READY_TO_TEST := $(VENV)/.ready-to-test
OTHER := .venv-portability
READY_FOR_OTHERS := $(OTHER)/.ready
COMPILED := target/lint
PYTEST_ARGS ?=
PIP := -m pip install --quiet --disable-pip-version-check --editable

export DBT_SEND_ANONYMOUS_USAGE_STATS := false

.DEFAULT_GOAL := help
.PHONY: help setup demo test pytest lint portability bench clean

help: ## Say what there is to make
	@awk -F ':.*## ' '/^[a-z]+:.*## / { printf "make %-12s %s\n", $$1, $$2 }' $(MAKEFILE_LIST)

# PIP_CONSTRAINT pins the build backend too, which -c would not.
$(READY): pyproject.toml constraints.txt
	$(PYTHON) -c 'import sys; sys.exit(sys.version_info < (3, 11) and "The pinned versions need Python 3.11 or later: make PYTHON=python3.11")'
	$(PYTHON) -m venv --clear $(VENV)
	PIP_CONSTRAINT=constraints.txt $(BIN)/python $(PIP) '.[duckdb]'
	@touch $@

$(READY_TO_TEST): $(READY)
	PIP_CONSTRAINT=constraints.txt $(BIN)/python $(PIP) '.[dev]'
	@touch $@

$(READY_FOR_OTHERS): pyproject.toml tests/portability/constraints.txt
	$(PYTHON) -m venv --clear $(OTHER)
	PIP_CONSTRAINT=tests/portability/constraints.txt $(OTHER)/bin/python $(PIP) '.[portability]'
	@touch $@

setup: $(READY_TO_TEST) ## Make the virtual environment in .venv

demo: $(READY) ## Build the tool library's figures on DuckDB and show them
	$(BIN)/spellcurve demo

test: lint pytest ## Lint, then run every test on DuckDB, PostgreSQL and Spark

pytest: $(READY_TO_TEST)
	$(BIN)/python -m pytest --numprocesses auto --maxprocesses 4 --dist loadfile $(PYTEST_ARGS)

lint: $(READY_TO_TEST) ## Check the Python code with ruff and mypy, and the compiled SQL with sqlfluff
	$(BIN)/ruff check .
	$(BIN)/mypy
	rm -rf $(COMPILED)
	$(BIN)/dbt --quiet compile --no-introspect --no-populate-cache --profiles-dir .ci --target-path $(COMPILED) \
	    --vars '{spellcurve_demo: true}' --exclude resource_type:test
	$(BIN)/sqlfluff lint --disable-progress-bar --processes 0 $(COMPILED)/compiled

portability: $(READY_FOR_OTHERS) ## Compile for seven more warehouses and compare their figures
	$(OTHER)/bin/python -m pytest tests/portability $(PYTEST_ARGS)

bench: $(READY_TO_TEST) ## Measure survival_curve on ten million spells and write benchmarks/results.md
	$(BIN)/python benchmarks/survival_curve.py

clean: ## Remove the virtual environment and everything built
	rm -rf $(VENV) $(OTHER) target logs dbt_packages .hypothesis .mypy_cache .pytest_cache .ruff_cache build dist spellcurve-demo
	find . -name __pycache__ -type d -prune -exec rm -rf {} +
