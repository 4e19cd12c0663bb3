# Everything a developer needs, on a machine with Python 3.11 or newer, pip, cargo and make.
# Plain `make` explains the targets.

.DEFAULT_GOAL := help
.DELETE_ON_ERROR:
SHELL := /bin/bash
.SHELLFLAGS := -euo pipefail -c

VENV := .venv
BIN := $(VENV)/bin
READY := $(VENV)/.setup-done
EXTENSION := python/drumlin/_core.abi3.so
RUST := $(shell find rust -name '*.rs' -o -name Cargo.toml) Cargo.toml $(wildcard Cargo.lock) rust-toolchain.toml pyproject.toml
FIND_PYTHON := for python in "$${PYTHON:-python3.11}" python3 python; do \
  if "$$python" -c 'import sys; sys.exit(sys.version_info < (3, 11))' 2>/dev/null; then break; fi; python=; done; \
  if [ -z "$$python" ]; then echo "No Python 3.11 or newer was found: install one, or name it with PYTHON=..." >&2; exit 1; fi

# Variables that would hold the reference and the matrix product back in a benchmark.
FREE_BLAS = $$(env | sed -nE 's/^((OPENBLAS_|OMP_NUM_THREADS|GOTO_NUM_THREADS)[A-Z0-9_]*)=.*/-u \1/p')

export PYO3_PYTHON := $(CURDIR)/$(BIN)/python
export VIRTUAL_ENV := $(CURDIR)/$(VENV)
unexport CONDA_PREFIX PYTHONPATH PYTHONHOME

.PHONY: help setup build demo test test-slow test-rust test-python counted record-instructions lint format bench bench-quick wheel clean

help: ## Explain the targets
	@echo "drumlin: make <target>"
	@grep -hE '^[a-z-]+:.*## ' Makefile | sed -E 's/^([a-z-]+):.*## /\1\t/' | while IFS=$$'\t' read -r name text; do \
	  printf '  %-20s %s\n' "$$name" "$$text"; done
	@echo "Each target does its own set-up in $(VENV); nothing outside the checkout is changed."

setup: $(READY) ## Make the virtual environment with the pinned tools

$(READY): requirements-dev.txt
	@$(FIND_PYTHON); echo "set-up: $$("$$python" --version) -> $(VENV)"; \
	  [ -x $(BIN)/python ] || "$$python" -m venv $(VENV)
	@$(BIN)/python -m pip install --quiet --disable-pip-version-check --requirement requirements-dev.txt
	@touch $@

build: $(EXTENSION) ## Compile the core and install the package into the environment (editable)

$(EXTENSION): $(READY) $(RUST)
	@echo "build: compiling the core (optimised; a few minutes the first time)"
	@start=$$SECONDS; $(BIN)/maturin develop --release --locked --quiet; touch $@; \
	  echo "build: $$((SECONDS - start)) s"

demo: build ## Run the whole job on generated parcel scans (ROWS=2000000)
	@$(BIN)/drumlin demo $(if $(ROWS),--rows $(ROWS))

test: build lint test-rust test-python ## Build, lint and run all tests but the slow ones

test-rust: $(READY) ## Run the tests of the core only
	cargo test --locked -p drumlin-core

test-python: build counted ## Run the Python tests only, without the slow ones
	$(BIN)/python -m pytest -n 2 -m "not slow"

# The example whose instructions are counted. The binding is named too, so that only the core is compiled once more.
counted: build
	@if command -v valgrind >/dev/null; then \
	  cargo build --quiet --release --locked -p drumlin-core -p drumlin-py --example counted; \
	else echo "valgrind is not installed: the tests that count instructions will be skipped"; fi

record-instructions: counted ## Count the instructions of the kernels anew and record them (needs valgrind)
	$(BIN)/python tests/counting.py

test-slow: build ## Run the slow tests: memory at scale, large oracles
	$(BIN)/python -m pytest -m slow

lint: build ## Check formatting, lints, types and the stub against the binary
	cargo fmt --all --check
	cargo clippy --locked --workspace --all-targets -- -D warnings
	$(BIN)/ruff check python tests benchmarks
	$(BIN)/ruff format --check python tests benchmarks
	$(BIN)/mypy --strict python/drumlin
	$(BIN)/python -m mypy.stubtest drumlin._core --mypy-config-file pyproject.toml \
	  --allowlist tests/contract/stub_allowed.txt

format: $(READY) ## Format all sources
	cargo fmt --all
	$(BIN)/ruff check --fix-only --quiet python tests benchmarks
	$(BIN)/ruff format python tests benchmarks

bench: build ## Time passes against scikit-learn, answers checked first; keeps a record (10 minutes)
	@env $(FREE_BLAS) $(BIN)/python benchmarks/run.py

bench-quick: build ## The same for a few lines, without a record (under two minutes)
	@env $(FREE_BLAS) $(BIN)/python benchmarks/run.py --quick

wheel: $(READY) ## Build a wheel for distribution into dist/
	$(BIN)/maturin build --locked --out dist

clean: ## Remove everything that was built, the environment too
	rm -rf target dist $(VENV) python/drumlin/_core*.so .pytest_cache .mypy_cache .ruff_cache .hypothesis
	find python tests benchmarks -name __pycache__ -type d -prune -exec rm -rf {} +
