# Everything a contributor or a first-time visitor runs; README names demo and test.
SHELL := /bin/bash
VENV := .venv
PYTHON := $(VENV)/bin/python
STAMP := $(VENV)/.installed
TESTS ?= tests
WORKERS ?= 2

.PHONY: demo test venv lint bench colcon clean

demo: $(STAMP)
	@$(PYTHON) -m teleop_eval demo

test: $(STAMP) lint
	$(PYTHON) -m pytest $(TESTS) -n $(WORKERS) --dist loadgroup -q -rs --durations=10

venv: $(STAMP)

# The interpreter is looked for, not assumed: 3.10 to 3.13 have ROS 2 wheels.
$(STAMP): setup.py package.xml
	@PYTHON_FOR_VENV="$(PYTHON_FOR_VENV)" bash .ci/make_venv $(VENV)
	@touch $@

lint: $(STAMP)
	$(VENV)/bin/ruff check
	$(VENV)/bin/mypy

bench: $(STAMP)
	$(PYTHON) -m tests.benchmarks

colcon: $(STAMP)
	@bash .ci/colcon $(VENV)

clean:
	rm -rf $(VENV) build install log .cache .pytest_cache .mypy_cache .ruff_cache
