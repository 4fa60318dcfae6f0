# Two sets of versions: `make … SET=jazzy` takes the one nearest to a robot on Ubuntu 24.04, in a folder of its own.
SET ?= kilted
PYTHON ?= python3
# More words for pytest or for the demo: make test ARGS="-k drive"
ARGS ?=
VENV := $(if $(filter kilted,$(SET)),.venv,.venv-$(SET))

# One BLAS thread: the matrices are small, and threads only take the loop's cores away.
export OPENBLAS_NUM_THREADS := 1
export ROS_AUTOMATIC_DISCOVERY_RANGE := LOCALHOST
# A sourced ROS would mix its libraries with those of the wheels.
unexport PYTHONPATH PYTHONHOME LD_LIBRARY_PATH AMENT_PREFIX_PATH CMAKE_PREFIX_PATH COLCON_PREFIX_PATH RMW_IMPLEMENTATION
unexport _ROS_WHEELS_BOOTSTRAP_COMPLETE

SET_UP := @PYTHON="$(PYTHON)" tools/setup_venv.sh $(SET)

.PHONY: help demo test lint bench prove clean

help:  ## this list
	@sed -n 's/^\([a-z]*\):.*## /  make \1\t/p' Makefile | expand -t 16
	@echo "  SET=jazzy takes the versions nearest to Ubuntu 24.04 (default: kilted, the newest); PYTHON=… another Python"

demo:  ## the whole stack, headless: the robot shelves a book and its ball stays
	$(SET_UP) run
	$(VENV)/bin/ballbal headless config/plans/shelve.yaml --robot config/shelver $(ARGS)

# What talks over the bus has a process of its own: after a thousand other tests in one process its listeners heard nothing.
# Its tests wait by the wall clock for processes that share the machine: one that fails is tried once more, and said so.
# Lint and types hold for one set of libraries; the other set is there to run.
test: $(if $(filter kilted,$(SET)),lint)  ## lint, types and tests, under 10 minutes
	$(SET_UP) test
	@$(VENV)/bin/python -m pytest -q -n 2 --dist loadfile --ignore=test/ros --ignore=test/benchmark $(ARGS)
	@$(VENV)/bin/python -m pytest -q --reruns 1 -rR test/ros $(ARGS)

lint:  ## ruff and mypy
	$(SET_UP) test
	@$(VENV)/bin/ruff check .
	@$(VENV)/bin/mypy

bench:  ## timed figures
	$(SET_UP) test
	$(VENV)/bin/python -m pytest -m bench $(ARGS)

prove:  ## long campaigns
	$(SET_UP) test
	$(VENV)/bin/python -m pytest -m prove $(ARGS)

clean:  ## take away environments, caches and what builds leave
	rm -rf .venv .venv-* .venv.log .venv.lock build install log *.egg-info .pytest_cache .mypy_cache .ruff_cache .benchmarks
	find . -name __pycache__ -type d -prune -exec rm -rf {} +
