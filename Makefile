# `make help` lists what there is. Works with GNU make 3.81 (macOS) and newer.

# The environment's own Python once there is one that runs; name another with PYTHON=python3.12.
PYTHON ?= $(shell if .venv/bin/python -c '' 2>/dev/null; then echo .venv/bin/python; else echo python3; fi)
PORT ?= 8765
JOBS ?= $(shell getconf _NPROCESSORS_ONLN 2>/dev/null || echo 2)
# More arguments for pytest, for instance ARGS="-k alpha".
ARGS ?=
ONCE ?=

BIN := .venv/bin
PROCESSES := kinetics_db/config/processes
PYTEST := $(BIN)/python -m pytest -n $(JOBS) --dist loadfile
TYPED := $(wildcard kinetics_db api workers manage.py)
FOLDERS_OF_CODE := $(wildcard kinetics_db api workers tests manage.py)
# Tests that do not touch the database are not run a second time.
TESTS_WITHOUT_DATABASE := tests/engine tests/architecture tests/processes tests/services tests/factories \
	tests/bench tests/browser tests/__pycache__
# REST answers the same on either; the flows try it on SQLite too.
TESTS_ON_POSTGRESQL := tests/api tests/access tests/scale
TESTS_ON_SQLITE = $(filter-out $(TESTS_WITHOUT_DATABASE) $(TESTS_ON_POSTGRESQL),$(patsubst %/.,%,$(wildcard tests/*/.)))

# Threads inside the linear algebra cost more than they bring for small matrices.
export OPENBLAS_NUM_THREADS := 1
export OMP_NUM_THREADS := 1
export MKL_NUM_THREADS := 1
export PORT
# Invented data stay apart from one's own, unless a folder is named.
ifneq ($(filter demo,$(MAKECMDGOALS)),)
export RATEWRIGHT_VAR := $(or $(RATEWRIGHT_VAR),$(CURDIR)/var/demo)
endif

.DEFAULT_GOAL := help
.NOTPARALLEL:
.PHONY: help demo serve screens test check check-slow static test-postgresql test-sqlite format lock clean development

help: ## list what can be made
	@echo "Ratewright. What you can make:"
	@sed -n 's/^\([a-z][a-z-]*\):.*## \(.*\)/  \1 # \2/p' $(firstword $(MAKEFILE_LIST)) \
		| awk -F ' # ' '{ printf "  make %-16s %s\n", substr($$1, 3), $$2 }'
	@echo "Options: PORT=8765 (web server)  PYTHON=python3.12  JOBS=2 (test processes)  ARGS=... (for pytest)"

demo: ## the whole job on an invented project, then the web server (ONCE=1: end after the grid)
	@$(PYTHON) $(PROCESSES)/preflight.py demo
	@$(PYTHON) $(PROCESSES)/install.py runtime
	@$(BIN)/python manage.py demo --port $(or $(PORT),8765) $(if $(ONCE),--once)

serve: ## the same installation without invented data, until Ctrl-C
	@$(PYTHON) $(PROCESSES)/preflight.py serve
	@$(PYTHON) $(PROCESSES)/install.py runtime
	@$(BIN)/python manage.py serve --port $(or $(PORT),8765)

screens: development ## pictures of every page in docs/screens, taken in the invented project
	$(BIN)/python -m tests.browser.screens

test: static test-postgresql test-sqlite ## static checks and the whole suite, on real servers

check: test ## what has to hold before a commit: the same

check-slow: development ## the tests that take minutes
	$(PYTEST) -m slow $(ARGS)

static: development ## ruff, mypy, import contracts, missing migrations
	$(BIN)/ruff check $(FOLDERS_OF_CODE)
	$(BIN)/ruff format --check $(FOLDERS_OF_CODE)
	$(BIN)/mypy $(TYPED)
	$(BIN)/lint-imports
	RATEWRIGHT_VAR="$${TMPDIR:-/tmp}/ratewright-static" $(BIN)/python manage.py makemigrations --check --dry-run

test-postgresql: development ## the whole suite on PostgreSQL, Valkey and worker processes
	$(PYTEST) -m "not slow" $(ARGS)

test-sqlite: development ## domain, flow and fault tests on SQLite
	RATEWRIGHT_TEST_DB=sqlite $(PYTEST) -m "not slow" $(TESTS_ON_SQLITE) $(ARGS)

format: development ## put the code into the common form
	$(BIN)/ruff check --fix $(FOLDERS_OF_CODE)
	$(BIN)/ruff format $(FOLDERS_OF_CODE)

lock: ## pin the dependencies anew (needs uv)
	uv pip compile --universal --generate-hashes --no-header --no-annotate --quiet pyproject.toml --output-file requirements.lock
	uv pip compile --universal --generate-hashes --no-header --no-annotate --quiet pyproject.toml --group dev --constraint requirements.lock \
		--output-file requirements-dev.lock

clean: ## remove caches and the environment; var/ with the data stays
	rm -rf .venv .mypy_cache .ruff_cache .import_linter_cache .hypothesis
	find $(FOLDERS_OF_CODE) -name __pycache__ -type d -prune -exec rm -rf {} +

development:
	@$(PYTHON) $(PROCESSES)/preflight.py test
	@$(PYTHON) $(PROCESSES)/install.py development
