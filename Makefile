# Every target makes its own virtual environment in .venv and remakes the installation when pyproject.toml changes
# (the stamp carries the file's checksum). Needed beforehand: Python 3.11 or later, make, and the package registry.

PYTHON ?= $(shell for p in python3 python3.13 python3.12 python3.11 python; do \
	$$p -c 'import sys; sys.exit(sys.version_info < (3, 11))' >/dev/null 2>&1 && { echo $$p; break; }; done)
VENV := .venv
BIN := $(VENV)/bin
SUM := $(shell cksum pyproject.toml | cut -d ' ' -f 1)
BASE := $(VENV)/.installed-$(SUM)
DEV := $(VENV)/.installed-dev-$(SUM)

# One thread a process for the matrix library: the work is spread over processes, and results then do not
# depend on how many cores a machine has.
export OMP_NUM_THREADS := 1
export OPENBLAS_NUM_THREADS := 1

.PHONY: help demo test accuracy bench lint clean
.DEFAULT_GOAL := help

help:
	@echo "make demo      classify the invented observing run in demo_spectra/ and write demo_report/"
	@echo "make test      run the tests"
	@echo "make accuracy  measure the quality across instruments, write tests/accuracy/RESULTS.md"
	@echo "make bench     measure the speed, write tests/bench/RESULTS.md"
	@echo "make lint      ruff and mypy"
	@echo "make clean     remove what the build and the demo left (not .venv)"

$(BIN)/python:
	@test -n "$(PYTHON)" || { echo "No Python 3.11 or later found; install one, or say: make PYTHON=/path/to/python3"; exit 1; }
	$(PYTHON) -m venv $(VENV)

# A tree that already holds the development tools needs no second, smaller installation.
$(BASE): | $(BIN)/python
	@test -e $(DEV) || $(BIN)/python -m pip install --quiet --disable-pip-version-check --editable .
	@rm -f $(VENV)/.installed-[0-9]*
	@touch $@

$(DEV): | $(BIN)/python
	$(BIN)/python -m pip install --quiet --disable-pip-version-check --editable ".[dev]"
	@rm -f $(VENV)/.installed-*
	@touch $@

demo: $(BASE)
	$(BIN)/starfathom demo

# The browser tests time what a person waits for, so they run after the others and alone.
test: $(DEV)
	$(BIN)/python -m pytest -n auto --dist worksteal -m "not browser" $(PYTEST_ARGS)
	$(BIN)/python -m pytest -m browser $(PYTEST_ARGS) || [ $$? -eq 5 ]

accuracy: $(DEV)
	$(BIN)/python tests/accuracy/run_accuracy.py

bench: $(DEV)
	$(BIN)/python tests/bench/run_bench.py

# mypy looks for packages by folder name, which the folders here do not have; a tree of links gives them their
# import names without building a wheel.
lint: $(DEV)
	@rm -rf build/typing && mkdir -p build/typing/starfathom
	@for f in run/*; do ln -s "../../../$$f" build/typing/starfathom/; done
	@for d in classify distance templates demo_spectra; do ln -s "../../../$$d" build/typing/starfathom/$$d; done
	@$(BIN)/ruff check . ; ruff=$$?; \
	cd build/typing && ../../$(BIN)/mypy --config-file ../../pyproject.toml -p starfathom && exit $$ruff

clean:
	rm -rf build dist *.egg-info demo_report .pytest_cache .mypy_cache .ruff_cache .hypothesis
