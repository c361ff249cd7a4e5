# labmon: needs Python 3.11 or newer with pip, and make. One word each; `make` alone lists them.
PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin
PIP := $(BIN)/python -m pip --disable-pip-version-check install --quiet --require-hashes
TESTS ?= tests
WORKERS ?= 2
PORT ?= 8000

.PHONY: help setup dev demo run test slow js lint contracts bench published check chromium servers mqtt
.DEFAULT_GOAL := help

help:
	@echo "setup      virtual environment from requirements.lock"
	@echo "demo       the whole system with an invented laboratory (PORT=8000)"
	@echo "run        your own lab"
	@echo "test       everything that is not slow, on real engines and in a real browser"
	@echo "slow       kill tests, soak tests, the demo as a whole, the container's entry commands"
	@echo "lint contracts js bench    ruff; import contracts; node's tests; benchmarks"
	@echo "published  writes docs/published.md: computed beside published values"
	@echo "check      lint, contracts and test"

setup: $(VENV)/.done-runtime

dev: $(VENV)/.done-dev

$(BIN)/python:
	@$(PYTHON) -c 'import sys; sys.exit(sys.version_info < (3, 11))' 2>/dev/null || { \
	  echo "labmon needs Python 3.11 or newer; $(PYTHON) is $$($(PYTHON) -V 2>/dev/null || echo missing)."; \
	  echo "Name another one: make $(MAKECMDGOALS) PYTHON=python3.12"; exit 1; }
	@echo "making $(VENV)"
	@$(PYTHON) -m venv $(VENV) || { rm -rf $(VENV); \
	  echo "$(PYTHON) cannot make a virtual environment; on Debian: apt install python3-venv"; exit 1; }

$(VENV)/.done-runtime: requirements.lock | $(BIN)/python
	@echo "installing what requirements.lock names (a minute or two the first time)"
	@$(PIP) -r requirements.lock
	@touch $@

$(VENV)/.done-dev: requirements-dev.lock $(VENV)/.done-runtime
	@echo "installing what requirements-dev.lock names"
	@$(PIP) -r requirements-dev.lock
	@touch $@

demo: setup
	@exec $(BIN)/python manage.py run_lab --demo --data lab-data/demo --port $(PORT)

run: setup
	@exec $(BIN)/python manage.py run_lab --port $(PORT)

chromium:
	@.ci/need chromium || true

servers:
	@.ci/need postgresql redis-server || true

mqtt:
	@.ci/need mosquitto || true

test: dev chromium mqtt
	@marks='not slow'; .ci/has chromium || marks='not slow and not browser'; \
	  $(BIN)/python -m pytest -n $(WORKERS) --dist loadscope -m "$$marks" $(TESTS)
	@$(MAKE) --no-print-directory js
	@.ci/has chromium || echo "Browser tests were left out: chromium is missing (the lines at the start say how to get it)."

slow: dev chromium servers mqtt
	@marks='slow'; .ci/has chromium || marks='slow and not browser'; $(BIN)/python -m pytest -m "$$marks" $(TESTS)

js:
	@if command -v node >/dev/null; then \
	  said=$$(node --test $$(find tests/js -name '*.test.mjs') 2>&1) || { echo "$$said"; exit 1; }; \
	  echo "JavaScript: $$(echo "$$said" | sed -n 's/^# pass //p') tests passed"; \
	  else echo "JavaScript tests were left out: node is missing (on Debian: apt install nodejs)."; fi

lint: dev
	@$(BIN)/ruff check .

contracts: dev
	@$(BIN)/lint-imports
	@cd clients/bench && ../../$(BIN)/lint-imports
	@cd clients/notebook && ../../$(BIN)/lint-imports

bench: dev
	@for script in benchmarks/bench_*.py; do echo "== $$script"; $(BIN)/python -m benchmarks.$$(basename $$script .py) || exit 1; done

published: dev
	@$(BIN)/python -m tests.reference.published.table

check: lint contracts test
