# make run   judge the embedded emulated module and write a report
# make test  set up what the tests need, then lint, types, layering, tests
.DELETE_ON_ERROR:
.DEFAULT_GOAL := help
SHELL := /bin/bash

PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin
FIRMWARE := emulator/firmware
PIP_INSTALL := $(BIN)/python -m pip --disable-pip-version-check --quiet install
PYTEST_OPTIONS ?=
JOBS ?= 2

READY := $(VENV)/.ready
TOOLS := $(VENV)/.tools
TEST_TOOLS := $(VENV)/.test-tools

.PHONY: help setup run test lint firmware lock clean

help: ## say what can be made
	@grep -hE '^[a-z-]+:.*## ' $(MAKEFILE_LIST) | sed -E 's/^([a-z-]+):.*## /make \1\t/' | expand -t 18

# --- environment ------------------------------------------------------------------------------------------------

# Compiler and headers: for the firmware, and for the C extensions of two dependencies. Installed only where
# this user may; said clearly where not.
$(TOOLS): scripts/ensure-tools
	@scripts/ensure-tools $(PYTHON)
	@mkdir -p $(VENV) && touch $@

$(TEST_TOOLS): scripts/ensure-tools
	@scripts/ensure-tools $(PYTHON) tests
	@mkdir -p $(VENV) && touch $@

$(BIN)/python: | $(TOOLS)
	@$(PYTHON) -c 'import sys; sys.exit(sys.version_info < (3, 11))' || \
	  { echo "protobench needs Python 3.11 or newer; $(PYTHON) is $$($(PYTHON) -V 2>&1)." \
	         "Name another with: make $(MAKECMDGOALS) PYTHON=python3.11" >&2; exit 1; }
	@$(PYTHON) -m venv $(VENV)

# The build backends come first and from a lock of their own, so that nothing unpinned is fetched to build a package.
$(READY): pyproject.toml requirements.lock requirements-build.lock | $(BIN)/python
	$(PIP_INSTALL) --require-hashes -r requirements-build.lock
	$(PIP_INSTALL) --require-hashes --no-build-isolation --use-pep517 -r requirements.lock
	$(PIP_INSTALL) --no-deps --no-build-isolation --editable .
	@touch $@

setup: $(READY) ## make .venv from the lock, the project in it

# --- use --------------------------------------------------------------------------------------------------------

run: $(READY) ## judge the embedded emulated module; report in build/report
	$(BIN)/protobench check --out build/report

firmware: $(TOOLS) ## build the C module: plain, sanitized, and broken on purpose
	@if [ -d $(FIRMWARE) ]; then $(MAKE) --no-print-directory -C $(FIRMWARE) all sanitized variants; fi

# --- checks -----------------------------------------------------------------------------------------------------

lint: $(READY) ## ruff, mypy, import-linter
	$(BIN)/ruff check .
	$(BIN)/mypy
	$(BIN)/lint-imports --no-cache

test: $(READY) $(TEST_TOOLS) firmware lint ## everything: firmware, lint, types, layering, tests
	$(BIN)/python -m pytest -n $(JOBS) -m "not alone" $(PYTEST_OPTIONS)
	$(BIN)/python -m pytest -m alone $(PYTEST_OPTIONS) || { [ $$? -eq 5 ] && [ -n "$(PYTEST_OPTIONS)" ]; }

lock: ## renew both lock files (then commit them)
	$(BIN)/uv pip compile pyproject.toml --all-extras --universal --python-version 3.11 --generate-hashes \
	  --no-emit-index-url --no-header --no-annotate --quiet --output-file requirements.lock
	printf 'setuptools\nhatchling\n' | $(BIN)/uv pip compile - --constraint requirements.lock --universal \
	  --python-version 3.11 --generate-hashes --no-emit-index-url --no-header --no-annotate --quiet \
	  --output-file requirements-build.lock

clean: ## remove build output and the environment
	@if [ -d $(FIRMWARE) ]; then $(MAKE) --no-print-directory -C $(FIRMWARE) clean; fi
	rm -rf build dist .mypy_cache .ruff_cache .pytest_cache .hypothesis $(VENV)
