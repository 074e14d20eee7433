# One command each. Everything runs in .venv with the pinned packages of constraints.txt. Linux, Python 3.11 to 3.13.
PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin
SEED ?= 7
DEMO ?= --out demo-out --bars 3

.PHONY: demo test lint check bench soak sim setup libraries clean

demo: setup
	$(BIN)/midspan demo $(DEMO)

test: setup libraries
	$(BIN)/python -m pytest tests -n auto --dist worksteal

lint: setup
	$(BIN)/ruff check . && $(BIN)/ruff format --check . && $(BIN)/mypy

check: lint test

bench: setup
	$(BIN)/python -m benchmarks --out bench-out

soak: setup
	$(BIN)/python -m tests.soak --out soak-out

sim: setup
	$(BIN)/python -m tests.scenarios.run --seed $(SEED)

setup: $(VENV)/ready

# Shared libraries and a font that the window needs off-screen: installed by apt where they are missing.
libraries:
	@sh .ci/libraries

$(VENV)/ready: pyproject.toml constraints.txt
	@$(PYTHON) -c 'import sys; sys.exit(None if (3, 11) <= sys.version_info[:2] <= (3, 13) else "midspan needs Python 3.11 to 3.13, this is " + sys.version.split()[0])'
	@$(PYTHON) -c 'import sys; sys.exit(None if sys.platform == "linux" else "midspan runs on Linux only for now")'
	$(PYTHON) -m venv $(VENV)
	$(BIN)/pip install --quiet --upgrade pip
	$(BIN)/pip install --quiet -c constraints.txt -e '.[dev]'
	@touch $(VENV)/ready

clean:
	rm -rf $(VENV) demo-out bench-out soak-out
