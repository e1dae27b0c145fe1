# Everything a person does with a checkout. Each target makes .venv first, if it is not there.
#   make PYTHON=/usr/bin/python3.12 ...   another interpreter (3.11 or newer)
#   make VENV=.venv-other ...             another folder

VENV ?= .venv
export VENV PYTHON
BIN := $(VENV)/bin
# Small matrices: one thread is faster, and two test workers do not fight over two cores.
export OPENBLAS_NUM_THREADS ?= 1

.PHONY: help install install-dev demo test lint bench calibrate lock clean

help:
	@echo "make demo       open an invented study (without a terminal: run it and print the result)"
	@echo "make install    set up the program in $(VENV)"
	@echo "make test       the tests"
	@echo "make lint       style, types and the direction of imports"
	@echo "make bench      speed, memory and growth"
	@echo "make calibrate  coverage and size by simulation (long)"
	@echo "make lock       lock the dependencies of pyproject.toml anew"
	@echo "make clean      remove what the other targets made"

install:
	@sh ./setup.sh run

install-dev:
	@sh ./setup.sh dev

demo: install
	@$(BIN)/cutbank demo

test: install-dev
	@$(BIN)/python -m pytest -n 2 $(ARGS)

lint: install-dev
	@$(BIN)/ruff check .
	@$(BIN)/ruff format --check .
	@$(BIN)/mypy
	@$(BIN)/lint-imports

# A benchmark is a script that prints a table; calibration.py is the long one and runs alone.
bench: install-dev
	@for script in $$(ls benchmarks/*.py 2>/dev/null | grep -v /calibration); do \
	    echo "== $$script"; $(BIN)/python "$$script" || exit 1; done

calibrate: install-dev
	@for script in $$(ls benchmarks/calibration*.py 2>/dev/null); do \
	    echo "== $$script"; $(BIN)/python "$$script" || exit 1; done
	@$(BIN)/python -m pytest -n 2 -m slow || test $$? -eq 5

# Versions and hashes only: the index, a mirror or the paths of whoever locks are nobody else's business.
LOCK := uv pip compile pyproject.toml --universal --python-version 3.11 --generate-hashes --upgrade \
	--no-emit-index-url --no-annotate --no-header --quiet --extra build
lock: install-dev
	@command -v uv >/dev/null || $(BIN)/python -m pip install --quiet uv
	@PATH="$$PATH:$(CURDIR)/$(BIN)" && $(LOCK) --extra dev --output-file requirements-dev.new \
	    && $(LOCK) --constraints requirements-dev.new --output-file requirements.new
	@for lock in requirements requirements-dev; do \
	    { echo "# Made by 'make lock' from pyproject.toml; not for editing."; cat $$lock.new; } >$$lock.lock \
	    && rm $$lock.new || exit 1; done

clean:
	@test ! -f $(VENV)/made-by-make || rm -rf $(VENV)
	@rm -rf .mypy_cache .ruff_cache .pytest_cache .hypothesis .import_linter_cache build dist
	@find . -name __pycache__ -type d -not -path './.venv*' -prune -exec rm -rf {} +
