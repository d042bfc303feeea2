# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

# make demo    six simulated robots turn together under the real nodes; the page is in out/demo
# make test    everything that must hold: lint, types, unit, ros, colcon (each is a target of its own)
# make campaign  500 rehearsals with faults at random moments, with a table (an hour or so on two cores)
# make clean   away with .venv and all that was built
#
# Both commands make .venv first, from Python 3.10 to 3.13 (ROS 2 comes as wheels, which exist for these).
# PYTHON=/path/to/python3.12 chooses the interpreter; after changing it: make clean.

SHELL := /bin/bash
.SHELLFLAGS := -euo pipefail -c
.DELETE_ON_ERROR:
.NOTPARALLEL:
.DEFAULT_GOAL := help

PYTHON ?=
CANDIDATES := $(or $(PYTHON),python3.12 python3.11 python3.13 python3.10 python3)
PY := .venv/bin/python

# The wheels and a sourced ROS 2 must not mix; and the guard variable that the wheels hand to every child
# would keep another environment's Python from finding its libraries.
ifneq ($(ROS_DISTRO)$(_ROS_WHEELS_BOOTSTRAP_COMPLETE),)
unexport LD_LIBRARY_PATH
endif
unexport _ROS_WHEELS_BOOTSTRAP_COMPLETE PYTHONPATH PYTHONHOME VIRTUAL_ENV CMAKE_PREFIX_PATH COLCON_PREFIX_PATH
unexport ROS_DISTRO ROS_VERSION ROS_PYTHON_VERSION RMW_IMPLEMENTATION ROS_LOCALHOST_ONLY ROS_STATIC_PEERS
export AMENT_PREFIX_PATH := $(CURDIR)/.venv

# Tests talk on a domain of their own (Linux: 0 to 101 are safe) and never leave this machine.
TEST_DOMAIN := $(shell echo $$((1 + $$PPID % 100)))
ON_TEST_DOMAIN = ROS_DOMAIN_ID=$(TEST_DOMAIN) ROS_AUTOMATIC_DISCOVERY_RANGE=LOCALHOST
# Small matrices: more threads only take the cores from each other.
ONE_THREAD := OMP_NUM_THREADS=1 OPENBLAS_NUM_THREADS=1

.PHONY: help demo test lint types unit ros colcon campaign clean
help:
	@sed -n 's/^# \(make .*\)/\1/p' Makefile

demo: .venv/run.stamp
	.venv/bin/coord-planner demo

test: lint types unit ros colcon
	@echo "all tests passed"

lint: .venv/test.stamp
	$(PY) -m ruff check --config .ci/ruff.toml coord_planner test launch setup.py

types: .venv/test.stamp
	$(PY) -m mypy coord_planner

# Groups of ROS tests mostly wait, each on a domain of its own: two at a time.
# The cluster's processes need the cores for themselves, or they take each other for dead.
unit: .venv/test.stamp .venv/test_data/recordings.stamp
	$(ONE_THREAD) $(PY) -m pytest -q -n 2 --ignore test/ros --ignore test/test_sweep_cluster.py test
	$(ONE_THREAD) $(PY) -m pytest -q test/test_sweep_cluster.py

ros: .venv/test.stamp
	$(ONE_THREAD) $(ON_TEST_DOMAIN) timeout -k 10 900 $(PY) -m pytest -q -n 2 --dist loadfile test/ros

# Builds as a ROS 2 workspace does, then looks at the result as one who has sourced that workspace.
colcon: .venv/test.stamp
	@case "$$PWD" in *" "*) echo "colcon cannot build in a folder with a blank in its path: $$PWD; move it" >&2; exit 1 ;; esac
	@rm -rf build/colcon
	$(PY) -m colcon --log-base build/colcon/log build --paths . \
	  --build-base build/colcon/build --install-base build/colcon/install
	set +u; . build/colcon/install/local_setup.bash; set -u; \
	REQUIRE_INSTALLED=1 $(ON_TEST_DOMAIN) timeout -k 10 400 .venv/bin/pytest -q test/test_packaging.py test/test_launch.py

campaign: .venv/run.stamp
	$(ONE_THREAD) $(PY) -m coord_planner.commands.campaign

clean:
	rm -rf .venv build install log out .pytest_cache .mypy_cache .ruff_cache .hypothesis *.egg-info
	find coord_planner test launch -name __pycache__ -type d -prune -exec rm -rf {} +

# Editable: changes of the code need no new installation, and parameter files are read from the tree.
.venv/run.stamp: setup.py setup.cfg | .venv/bin/pip
	$(PY) -m pip install -qq --use-pep517 --editable '.[ros]'
	@touch $@

.venv/test.stamp: .venv/run.stamp
	$(PY) -m pip install -qq --use-pep517 --editable '.[ros,test]'
	$(PY) -c 'from coord_planner.trial.kernels import load_kernels; load_kernels(print)'
	@touch $@

# Recordings that ship with packages of PyPI: only read, from where they were downloaded to. Where they cannot be had,
# the tests that need them say so and are skipped.
.venv/test_data/recordings.stamp: | .venv/bin/pip
	@mkdir -p $(@D)
	@if $(PY) -m pip download -qq --no-deps --dest $(@D) traffic==2.13 \
	  && $(PY) -m pip download -qq --no-deps --no-binary :all: --dest $(@D) evo==1.38.1; then touch $@; \
	else echo "recordings cannot be downloaded: tests that need them are skipped" >&2; fi

.venv/bin/pip:
	@tried=; chosen=; lame=; \
	for python in $(CANDIDATES); do \
	  version=$$($$python -c 'import sys; print("%d.%d" % sys.version_info[:2])' 2>/dev/null) || continue; \
	  tried="$$tried $$python ($$version)"; \
	  case $$version in 3.10|3.11|3.12|3.13) ;; *) continue ;; esac; \
	  if $$python -c 'import ensurepip, venv' 2>/dev/null; then chosen=$$python; break; fi; \
	  lame=$${lame:-$$version}; \
	done; \
	if [ -z "$$chosen" ] && [ -n "$$lame" ]; then \
	  echo "Python $$lame is here, but not its venv module. On Debian and Ubuntu:" >&2; \
	  echo "    sudo apt install python$$lame-venv      (python3-venv for the system's own python3)" >&2; exit 1; \
	elif [ -z "$$chosen" ]; then \
	  echo "No Python from 3.10 to 3.13; found:$${tried:- none}. ROS 2 comes as wheels, which exist for these only." >&2; \
	  echo "Install one (Debian and Ubuntu: sudo apt install python3 python3-venv), or name one:" >&2; \
	  echo "    make PYTHON=/path/to/python3.12 $(MAKECMDGOALS)" >&2; exit 1; \
	fi; \
	echo "making .venv with $$chosen; the first time takes some minutes"; \
	rm -rf .venv; $$chosen -m venv .venv || { rm -rf .venv; exit 1; }
	@$(PY) -m pip install -qq --upgrade pip
