# Needs git, make and Python 3.11 or newer. Everything else goes into $(VENV); no root, no SuiteSparse required.
#   make compare                        the main job: solve the greenhouse problem and compare with the reference
#   make zoo                            all evidence about all problems, and the table of README.md
#   make test PYTEST_ARGS="-k linear"   the tests
#   make cholmod                        try again to install CHOLMOD, after installing the SuiteSparse headers
#   make lint, make format, make clean

COMPARE = compare problems/frost_bench.py --html frost_bench.html
PYTEST_ARGS ?=

# The first of these that is new enough is used; PYTHON=/path/to/python overrides.
PYTHON = python3 python3.14 python3.13 python3.12 python3.11
VENV = .venv
BIN = $(VENV)/bin
LOG = $(VENV)/setup.log
PIP = $(BIN)/python -m pip --disable-pip-version-check --no-input
# Show the end of the log when a step fails.
OR_TELL = || { tail -n 15 $(LOG); echo "Set-up failed; the whole log is $(LOG)"; exit 1; }

.PHONY: help compare zoo test lint format cholmod clean
help:
	@sed -n 's/^#   //p' Makefile

compare: $(VENV)/ready
	@$(BIN)/python -m ssn $(COMPARE)

zoo: $(VENV)/ready-test
	@OMP_NUM_THREADS=1 $(BIN)/python -m ssn verify problems --markdown README.md

test: $(VENV)/ready-test
	@$(BIN)/python -m pytest -q -n 2 --dist worksteal $(PYTEST_ARGS)

lint: $(VENV)/ready-dev
	@$(BIN)/ruff check .
	@$(BIN)/ruff format --check .
	@$(BIN)/mypy

format: $(VENV)/ready-dev
	@$(BIN)/ruff check --fix .
	@$(BIN)/ruff format .

$(VENV)/installed: pyproject.toml
	@for python in $(PYTHON); do \
	    if $$python -c 'import sys; sys.exit(sys.version_info < (3, 11))' 2>/dev/null; then found=$$python; break; fi; \
	done; \
	if [ -z "$$found" ]; then echo "Python 3.11 or newer is needed (tried: $(PYTHON)); try make PYTHON=/path/to/it"; exit 1; fi; \
	echo "Setting up $(VENV) with $$found, once; it takes a minute or two (log: $(LOG))"; \
	mkdir -p $(VENV); \
	$$found -m venv $(VENV) >$(LOG) 2>&1 $(OR_TELL)
	@$(PIP) install -e '.[problems]' >>$(LOG) 2>&1 $(OR_TELL)
	@touch $@

$(VENV)/ready: $(VENV)/installed
	@$(MAKE) --no-print-directory cholmod
	@touch $@

# Tried and reported, never required.
cholmod: $(VENV)/installed
	@log=$(VENV)/cholmod.log; \
	works() { $(BIN)/python -c 'import sksparse.cholmod' >>$$log 2>&1; }; \
	if $(PIP) install -e '.[cholmod]' >$$log 2>&1 && works; then \
	    echo "CHOLMOD: available, used for sparse factorisations"; \
	else \
	    $(PIP) uninstall -y scikit-sparse >>$$log 2>&1; \
	    if grep -qE 'cholmod.*No such file|cannot find -lcholmod' $$log; then why="no SuiteSparse headers: libsuitesparse-dev on Debian"; \
	    elif grep -qE "No such file or directory: '[^']*(cc|clang)'|command '[^']*(cc|clang)' failed" $$log; then why="no C compiler"; \
	    else why="see $$log"; fi; \
	    echo "CHOLMOD: not available ($$why), SuperLU is used"; \
	fi

$(VENV)/ready-test: $(VENV)/ready
	@echo "Installing what the tests need"
	@$(PIP) install -e '.[problems,test]' >>$(LOG) 2>&1 $(OR_TELL)
	@touch $@

$(VENV)/ready-dev: $(VENV)/ready
	@echo "Installing ruff and mypy"
	@$(PIP) install -e '.[dev]' >>$(LOG) 2>&1 $(OR_TELL)
	@touch $@

clean:
	rm -rf $(VENV) build dist .pytest_cache .mypy_cache .ruff_cache .hypothesis frost_bench.html
	find ssn problems tests benchmarks -name __pycache__ -prune -exec rm -rf {} +
