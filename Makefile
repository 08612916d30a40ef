# `make demo` and `make test` need python3 (3.11 or newer, with venv) and make; the rest is set up
# in .venv on the first run. Another interpreter: `make test PYTHON=python3.12`.

PYTHON ?= python3
RUN := .venv/bin/python
# One worker per core; `make test PYTEST_ARGS="-x -k words"` for a narrower run.
PYTEST_ARGS ?= -n auto --durations=10

.PHONY: demo test lint bench clean venv venv-test

demo: venv
	$(RUN) -m plant2 emit examples/focus_stage/loop.toml --into build/focus_stage
	$(RUN) examples/run_selfcheck.py focus_stage build/focus_stage

test: venv-test
	$(RUN) -m pytest $(PYTEST_ARGS)

lint: venv-test
	$(RUN) -m ruff check .
	$(RUN) -m ruff format --check .
	$(RUN) -m mypy --strict plant2

bench: venv
	$(RUN) tests/bench/startup.py

clean:
	rm -rf build dist .venv .pytest_cache .mypy_cache .ruff_cache .hypothesis
	find plant2 tests examples .ci -name __pycache__ -prune -exec rm -rf {} +

# Both return at once when nothing is to do.
# Compiled here, so that a start is quick even where Python is told to write no bytecode.
venv:
	@$(PYTHON) .ci/prepare.py
	@$(RUN) -m compileall -q plant2

venv-test:
	@$(PYTHON) .ci/prepare.py test
	@$(RUN) -m compileall -q plant2
