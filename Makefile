# Everything a fresh machine needs is Python 3.11 or newer and make.
#
#   make demo    build the environment, make the demo recordings, run the whole pipeline on them
#   make test    the same environment, then the test suite
#   make lint    linters and the check that generated files are current
#   make audit   known weaknesses of the libraries in constraints.txt (needs the network)
#   make truth   compare the demo's results with what was simulated
#   make help    all of them

ENVIRONMENT := .venv
BIN := $(ENVIRONMENT)/bin
ENVIRONMENT_STAMP := $(ENVIRONMENT)/built
RECORDINGS_STAMP := demo_data/recordings/made
DEMO_SOURCES := $(wildcard demo_data/*.py) demo_data/sessions.tsv

# The first Python that is new enough; `make PYTHON=/path/to/python demo` chooses another.
PYTHON ?= $(shell for name in python3 python3.11 python3.12 python3.13 python3.14 python; do \
	$$name -c 'import sys, ensurepip; sys.exit(sys.version_info < (3, 11))' 2>/dev/null \
	&& { command -v $$name; break; }; done)

# Jobs call `python`; it has to be the one of the environment.
RUN := PATH="$(CURDIR)/$(BIN):$$PATH"

.PHONY: help env has-python recordings demo test test-long lint audit format documents truth clean clean-results
.DEFAULT_GOAL := help

help:
	@echo "make demo           the whole pipeline on simulated recordings (builds what it needs)"
	@echo "make test           the test suite"
	@echo "make test-long      real runs that the suite leaves out: faults, scale, replay, web servers"
	@echo "make lint           linters; are generated files current"
	@echo "make audit          known weaknesses of the libraries in constraints.txt (needs the network)"
	@echo "make truth          the demo's results against what was simulated"
	@echo "make env            only the environment, in $(ENVIRONMENT)"
	@echo "make recordings     only the demo recordings"
	@echo "make format         format the code"
	@echo "make documents      bring config/config.yaml, the schemas and the README's table up to date"
	@echo "make clean          remove the environment, the demo recordings and caches"
	@echo "make clean-results  remove results/ and logs/ of this folder"

env: $(ENVIRONMENT_STAMP)

# For scripts: is there a Python to build with?
has-python:
	@test -n "$(PYTHON)"

$(ENVIRONMENT_STAMP): constraints.txt pyproject.toml
	@test -n "$(PYTHON)" || { \
		echo "No Python 3.11 or newer with the venv module was found." >&2; \
		echo "Install one (on Debian: apt-get install python3 python3-venv), or say where it is:" >&2; \
		echo "  make PYTHON=/path/to/python3.11 demo" >&2; exit 1; }
	@echo "Building the environment in $(ENVIRONMENT) with $(PYTHON); this takes a few minutes, once."
	@test -x $(BIN)/python || "$(PYTHON)" -m venv $(ENVIRONMENT)
	@$(BIN)/python -m pip install --quiet --disable-pip-version-check \
		--constraint constraints.txt "setuptools>=77"
	@$(BIN)/python -m pip install --quiet --disable-pip-version-check --no-build-isolation \
		--constraint constraints.txt --editable ".[cluster,storage,test,lint]"
	@touch $@
	@echo "The environment is ready."

recordings: $(RECORDINGS_STAMP)

$(RECORDINGS_STAMP): $(DEMO_SOURCES) | $(ENVIRONMENT_STAMP)
	@$(RUN) python demo_data/make_recordings.py
	@touch $@

demo: $(ENVIRONMENT_STAMP) $(RECORDINGS_STAMP)
	@# What a killed run left locked is unlocked; while a run is alive, this is refused and says so.
	@test -z "$$(ls .snakemake/locks 2>/dev/null)" || \
		$(RUN) snakemake --profile workflow/profiles/local --quiet reason host --unlock
	@$(RUN) snakemake --profile workflow/profiles/local --quiet reason host
	@echo
	@echo "The report: $(CURDIR)/results/report.html"
	@echo
	@$(RUN) odograph summary

test: $(ENVIRONMENT_STAMP)
	@$(RUN) python -m pytest -n 3 --dist loadfile

test-long: $(ENVIRONMENT_STAMP)
	@$(RUN) python -m pytest -n 3 --dist loadfile -m long

lint: $(ENVIRONMENT_STAMP)
	@$(RUN) ruff check .
	@$(RUN) ruff format --check .
	@$(RUN) snakefmt --check Snakefile workflow
	@$(RUN) snakemake --lint
	@$(RUN) python -m odograph.settings.document --check

# In an environment of its own, so that the tool's dependencies are not those that it judges.
audit: $(ENVIRONMENT_STAMP)
	@test -x $(ENVIRONMENT)/audit/bin/pip-audit || { $(BIN)/python -m venv $(ENVIRONMENT)/audit && \
		$(ENVIRONMENT)/audit/bin/python -m pip install --quiet --disable-pip-version-check pip-audit; }
	@$(ENVIRONMENT)/audit/bin/pip-audit --requirement constraints.txt --no-deps --disable-pip

format: $(ENVIRONMENT_STAMP)
	@$(RUN) ruff check --fix .
	@$(RUN) ruff format .
	@$(RUN) snakefmt Snakefile workflow

documents: $(ENVIRONMENT_STAMP)
	@$(RUN) python -m odograph.settings.document

truth: $(ENVIRONMENT_STAMP)
	@$(RUN) python demo_data/score_against_truth.py results

clean:
	rm -rf $(ENVIRONMENT) demo_data/recordings .pytest_cache .ruff_cache build src/odograph.egg-info
	find src tests demo_data -name __pycache__ -type d -exec rm -rf {} +

clean-results:
	rm -rf results logs .snakemake
