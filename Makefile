# Two targets are all a fresh machine needs: `make demo` and `make test`. The others serve contributors.
PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin

.PHONY: demo test lint bench clean

demo: $(VENV)/.sim
	$(BIN)/palmloop trial --simulated --out demo-output

test: $(VENV)/.test
	$(BIN)/ruff format --check .
	$(BIN)/ruff check .
	$(BIN)/mypy
	$(BIN)/lint-imports
	$(BIN)/python -m pytest

lint: $(VENV)/.test
	$(BIN)/ruff format .
	$(BIN)/ruff check --fix .
	$(BIN)/mypy
	$(BIN)/lint-imports

bench: $(VENV)/.test
	$(BIN)/python -m tests.benchmarks

clean:
	rm -rf $(VENV) demo-output

$(VENV)/bin/python:
	@sh .ci/make_venv $(PYTHON) $(VENV)

$(VENV)/.sim: $(VENV)/bin/python pyproject.toml
	@echo "installing palmloop and the simulated bench (once; about a minute)"
	@$(BIN)/python -m pip install --quiet --disable-pip-version-check -e '.[sim]'
	@touch $@

$(VENV)/.test: $(VENV)/bin/python pyproject.toml
	@echo "installing palmloop and what its tests compare with (once; a minute or two)"
	@$(BIN)/python -m pip install --quiet --disable-pip-version-check -e '.[test]'
	@$(BIN)/python -m pip install --quiet --disable-pip-version-check --no-deps bd-warehouse  # only its ISO 4032 table is read
	@touch $@ $(VENV)/.sim
