# Every target sets up what it needs: a virtual environment in .venv with the versions pinned in constraints.txt.

PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin
READY := $(VENV)/.ready
COMPILED := target/lint
PYTEST_ARGS ?=

export DBT_SEND_ANONYMOUS_USAGE_STATS := false

.DEFAULT_GOAL := help
.PHONY: help setup demo test pytest lint bench clean

help: ## Say what there is to make
	@awk -F ':.*## ' '/^[a-z]+:.*## / { printf "make %-8s %s\n", $$1, $$2 }' $(MAKEFILE_LIST)

# PIP_CONSTRAINT pins the build backend too, which -c would not.
$(READY): pyproject.toml constraints.txt
	$(PYTHON) -c 'import sys; sys.exit(sys.version_info < (3, 11) and "The pinned versions need Python 3.11 or later: make PYTHON=python3.11")'
	$(PYTHON) -m venv --clear $(VENV)
	PIP_CONSTRAINT=constraints.txt $(BIN)/python -m pip install --quiet --disable-pip-version-check --editable '.[dev]'
	@touch $@

setup: $(READY) ## Make the virtual environment in .venv

demo: $(READY) ## Build the tool library's figures on DuckDB and show them
	$(BIN)/spellcurve demo

test: lint pytest ## Lint, then run every test

pytest: $(READY)
	$(BIN)/python -m pytest $(PYTEST_ARGS)

lint: $(READY) ## Check the Python code with ruff and mypy, and the compiled SQL with sqlfluff
	$(BIN)/ruff check .
	$(BIN)/mypy
	rm -rf $(COMPILED)
	$(BIN)/dbt --quiet compile --no-introspect --no-populate-cache --profiles-dir .ci --target-path $(COMPILED) \
	    --vars '{spellcurve_demo: true}' --exclude resource_type:test
	$(BIN)/sqlfluff lint --disable-progress-bar $(COMPILED)/compiled

bench: $(READY) ## Measure survival_curve on ten million spells and write benchmarks/results.md
	$(BIN)/python benchmarks/survival_curve.py

clean: ## Remove the virtual environment and everything built
	rm -rf $(VENV) target logs dbt_packages .hypothesis .mypy_cache .pytest_cache .ruff_cache build dist spellcurve-demo
	find . -name __pycache__ -type d -prune -exec rm -rf {} +
