# Every target sets up what it needs: a virtual environment in .venv, re-used until pyproject.toml changes.
# Needs Python 3.11 or later with pip, and make. Another Python: make PYTHON=python3.12 demo

PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin
PIP := $(BIN)/python -m pip --disable-pip-version-check

# One BLAS thread per process: small matrices are slower with more, and the tests run in two processes.
THREADS := OMP_NUM_THREADS=1 OPENBLAS_NUM_THREADS=1 MKL_NUM_THREADS=1

.PHONY: demo test lint tables readme clean
.DEFAULT_GOAL := demo

demo: $(VENV)/.installed
	$(BIN)/unmix demo --out demo_out --overwrite

test: $(VENV)/.installed-dev
	$(THREADS) $(BIN)/python -m pytest -n 2 $(ARGS)

lint: $(VENV)/.installed-dev
	$(BIN)/ruff check .
	$(BIN)/ruff format --check .
	$(BIN)/mypy

tables: $(VENV)/.installed-dev
	$(THREADS) $(BIN)/python benchmarks/tables.py $(ARGS)

readme: $(VENV)/.installed-dev
	$(THREADS) $(BIN)/python docs/readme.py

clean:
	rm -rf $(VENV) demo_out build dist *.egg-info .pytest_cache .mypy_cache .ruff_cache .hypothesis

# Where Python comes without ensurepip (Debian splits it off), the system's pip fills the environment.
$(BIN)/python:
	@$(PYTHON) -c 'import sys; sys.exit(sys.version_info < (3, 11))' || \
		{ echo "Python 3.11 or later is needed; name one: make PYTHON=python3.12"; exit 1; }
	$(PYTHON) -m venv $(VENV) || \
		{ $(PYTHON) -m venv --clear --without-pip $(VENV) && $(PYTHON) -m pip --python $@ install pip; }

$(VENV)/.installed: pyproject.toml setup.py | $(BIN)/python
	$(PIP) install --quiet --editable .
	touch $@

$(VENV)/.installed-dev: pyproject.toml setup.py | $(BIN)/python
	$(PIP) install --quiet --editable '.[dev]'
	touch $@ $(VENV)/.installed
