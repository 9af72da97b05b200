# Everything a contributor or a first-time visitor runs; README names demo and test.
SHELL := /bin/bash
VENV := .venv
PYTHON := $(VENV)/bin/python
TESTS ?= tests
WORKERS ?= 2
RESULTS := .cache/results/pytest.xml

# A ROS installation that is sourced would mix its libraries with those of the wheels.
ifneq ($(AMENT_PREFIX_PATH),)
unexport LD_LIBRARY_PATH
endif
unexport PYTHONPATH PYTHONHOME AMENT_PREFIX_PATH COLCON_PREFIX_PATH CMAKE_PREFIX_PATH
unexport RMW_IMPLEMENTATION

.PHONY: demo test venv lint bench colcon clean

demo: $(VENV)/.run
	@$(PYTHON) -m teleop_eval demo

test: $(VENV)/.test lint
	$(PYTHON) -m pytest $(TESTS) -n $(WORKERS) --dist loadgroup -q -rs --durations=10 \
	    --junit-xml=$(RESULTS)

venv: $(VENV)/.test

# In stages, so that the demo need not wait for the test tools.
$(VENV)/.run: setup.py .ci/make_venv
	@PYTHON_FOR_VENV="$(PYTHON_FOR_VENV)" bash .ci/make_venv $(VENV) run
$(VENV)/.test: $(VENV)/.run
	@PYTHON_FOR_VENV="$(PYTHON_FOR_VENV)" bash .ci/make_venv $(VENV) test
$(VENV)/.colcon: $(VENV)/.test
	@PYTHON_FOR_VENV="$(PYTHON_FOR_VENV)" bash .ci/make_venv $(VENV) colcon

lint: $(VENV)/.test
	$(PYTHON) -m ruff check
	$(PYTHON) -m mypy

bench: $(VENV)/.test
	$(PYTHON) -m tests.benchmarks

# Compares with the last `make test`.
colcon: $(VENV)/.colcon
	@WORKERS=$(WORKERS) bash .ci/colcon $(VENV) $(RESULTS)

clean:
	rm -rf $(VENV) build install log .cache .pytest_cache .mypy_cache .ruff_cache .hypothesis
