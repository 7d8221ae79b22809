# make demo   sets everything up and runs the main job on the built-in ensembles
# make test   sets everything up and runs the tests
# make check  runs the linters and the type checker
# make lock   renews the hashed locks from pyproject.toml

PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin
export PIP_DISABLE_PIP_VERSION_CHECK := 1

.PHONY: demo test check lock clean

demo: $(VENV)/run.stamp
	$(BIN)/learnclosure demo

test: $(VENV)/test.stamp
	$(BIN)/python -m pytest --numprocesses 2 --dist loadfile

check: $(VENV)/test.stamp
	$(BIN)/ruff format --check .
	$(BIN)/ruff check .
	$(BIN)/mypy

$(BIN)/python:
	@$(PYTHON) -c 'import sys; sys.exit(sys.version_info < (3, 11))' \
	  || { echo 'learnclosure needs Python 3.11 or newer: make PYTHON=/path/to/python3.11'; exit 2; }
	@$(PYTHON) -c 'import ensurepip' 2>/dev/null \
	  || { echo 'Python has no venv support here: apt-get install python3-venv'; exit 2; }
	$(PYTHON) -m venv $(VENV)

$(VENV)/run.stamp: $(BIN)/python requirements.lock pyproject.toml
	$(BIN)/python -m pip install --quiet --require-hashes -r requirements.lock
	$(BIN)/python -m pip install --quiet --no-deps --no-build-isolation --editable .
	touch $@

$(VENV)/test.stamp: $(VENV)/run.stamp requirements-test.lock
	$(BIN)/python -m pip install --quiet --require-hashes -r requirements-test.lock
	touch $@

lock: $(VENV)/test.stamp
	printf 'hatchling\neditables\n' | $(BIN)/uv pip compile pyproject.toml - --universal --python-version 3.11 \
	  --generate-hashes --no-emit-index-url --no-header --quiet --output-file requirements.lock
	printf 'hatchling\neditables\n' | $(BIN)/uv pip compile pyproject.toml - --extra test --universal \
	  --python-version 3.11 --generate-hashes --no-emit-index-url --no-header --quiet \
	  --constraint requirements.lock --output-file requirements-test.lock

clean:
	rm -rf $(VENV) demo build dist .mypy_cache .ruff_cache .pytest_cache .hypothesis
