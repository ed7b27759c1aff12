# The project's commands. Everything is set up in .venv on first use; needs make, Python >= 3.11 and python3-venv.
PYTHON ?= python3
VENV   := .venv
BIN    := $(VENV)/bin
RUN    := $(VENV)/.installed-run
DEV    := $(VENV)/.installed-dev
PIP    := $(BIN)/python -m pip --disable-pip-version-check install --quiet --no-compile --constraint constraints.txt

.PHONY: demo test check campaign bench clean

demo: $(RUN)
	@$(BIN)/gainwright demo

test: $(DEV)
	$(BIN)/python -m pytest -n 2 -m "not campaign and not bench"

check: $(DEV)
	$(BIN)/ruff check .
	$(BIN)/ruff format --check .
	$(BIN)/mypy
	$(BIN)/lint-imports

campaign: $(DEV)
	$(BIN)/python -m pytest -m campaign

bench: $(DEV)
	$(BIN)/python tests/benchmarks/run.py

$(BIN)/python:
	$(PYTHON) -m venv $(VENV)

$(RUN): pyproject.toml constraints.txt | $(BIN)/python
	@echo "Installing Gainwright into $(VENV) (once)."
	@began=$$(date +%s); $(PIP) --editable . && echo "Installed in $$(( $$(date +%s) - began )) s."
	@touch $@

$(DEV): pyproject.toml constraints.txt | $(BIN)/python
	@echo "Installing Gainwright and its test tools into $(VENV) (once)."
	@began=$$(date +%s); $(PIP) --editable ".[dev]" && echo "Installed in $$(( $$(date +%s) - began )) s."
	@touch $@ $(RUN)

clean:
	rm -rf $(VENV) .mypy_cache .ruff_cache .pytest_cache .hypothesis
