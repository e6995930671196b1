# Two commands do everything on a fresh machine: `make demo` and `make test`.
PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin
STAMP := $(VENV)/.installed
TEST_STAMP := $(VENV)/.installed-test

.PHONY: demo test bench check-style docs clean

$(STAMP): pyproject.toml constraints.txt
	@$(PYTHON) -c 'import sys; sys.exit(0 if sys.version_info >= (3, 11) else "Trackfield needs Python 3.11 or newer; set PYTHON=...")'
	@echo "Setting up $(VENV) (once) ..."
	@$(PYTHON) -m venv $(VENV)
	@$(BIN)/pip install --quiet --disable-pip-version-check -c constraints.txt -e .
	@touch $@

$(TEST_STAMP): $(STAMP)
	@echo "Adding the test tools (once) ..."
	@$(BIN)/pip install --quiet --disable-pip-version-check -c constraints.txt -e '.[test,parquet]'
	@touch $@

demo: $(STAMP)
	@rm -rf runs/demo && mkdir -p runs/demo
	$(BIN)/trackfield check configs/lead-thorium-uranium/sequence.toml
	$(BIN)/trackfield rehearse configs/lead-thorium-uranium/sequence.toml --record runs/demo/lead.sqlite --seed 1
	$(BIN)/trackfield rehearse configs/strontium/sequence.toml --record runs/demo/strontium.sqlite --seed 1

check-style: $(TEST_STAMP)
	$(BIN)/ruff format --check controller drivers simulator tests benchmarks
	$(BIN)/ruff check controller drivers simulator tests benchmarks
	$(BIN)/mypy

test: $(TEST_STAMP) check-style
	$(BIN)/pytest -n 2

bench: $(TEST_STAMP)
	$(BIN)/python -m benchmarks

docs: $(STAMP)
	$(BIN)/python -m controller.run.diagram docs/state-machine.md

clean:
	rm -rf $(VENV) runs .pytest_cache .mypy_cache .ruff_cache
