# Paths here are relative, so that the project may lie in a folder with a space in its name.
PYTHON ?= python3
ARGS ?=
VENV_PYTHON := .venv/bin/python

.DEFAULT_GOAL := help
.PHONY: help demo serve test check bench soak openapi lock clean setup-run setup-test setup-dev
.NOTPARALLEL:
MAKEFLAGS += --no-print-directory

help: ## This list
	@echo "make TARGET [ARGS=\"...\"] [PYTHON=python3.12]"
	@awk -F ':.*## ' '/^[a-z-]+:.*## / { printf "  %-7s %s\n", $$1, $$2 }' Makefile

demo: setup-run ## The demonstration: a request, its stock, its written procedure
	@$(VENV_PYTHON) manage.py demo $(ARGS)

serve: setup-run ## Serve on this machine until Ctrl-C; ARGS="--port 8000 --workers 2"
	@$(VENV_PYTHON) manage.py serve $(ARGS)

test: setup-test ## All tests, on SQLite and on PostgreSQL; ARGS="-k name" picks some
	@$(VENV_PYTHON) tools/run_tests.py $(ARGS)

check: setup-dev ## Style, types, import rules, migrations, nothing of this machine in the tree
	@$(VENV_PYTHON) tools/run_checks.py

bench: setup-test ## Measure the speed of planning and of the ledger
	@$(VENV_PYTHON) -m tests.bench $(ARGS)

soak: setup-test ## Hours: 2,000 requests and 1,000,000 stock commands while all is broken at random
	@LABPLAN_SOAK=1 LABPLAN_REQUESTS=2000 $(VENV_PYTHON) tools/run_tests.py tests/simulation $(ARGS)

openapi: setup-run ## Make docs/openapi.yaml again from the code
	@$(VENV_PYTHON) tools/make_openapi.py

lock: ## Make the lock files again from pyproject.toml; ARGS=--upgrade takes new versions
	@$(PYTHON) tools/make_locks.py $(ARGS)

clean: ## Delete what the targets above made: .venv and caches; your data in var and out stays
	@if [ -e .venv/setup.json ]; then rm -rf .venv; fi
	@rm -rf .pytest_cache .mypy_cache .ruff_cache .hypothesis .import_linter_cache
	@find . \( -name .git -o -name .venv \) -prune -o -name __pycache__ -type d -prune -exec rm -rf {} +

setup-run setup-test setup-dev:
	@$(PYTHON) tools/setup_env.py $(@:setup-%=%)
