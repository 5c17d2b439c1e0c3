# The commands of this project; `make help` lists them. All run in .venv, which the first call makes.

BIN := .venv/bin
UV ?= uv
PYTEST ?= -n 3 --dist loadfile --no-loadscope-reorder
STRIP := $(BIN)/nbstripout --keep-id --extra-keys "metadata.language_info metadata.papermill cell.metadata.papermill"

.DEFAULT_GOAL := help
.PHONY: help setup answer test lint style format strip bench fuzz readme lab lock

help: ## show this list
	@sed -n 's/^\([a-z]*\):[^#]*## /\1|/p' Makefile | awk -F'|' '{ printf "make %-8s %s\n", $$1, $$2 }'

setup: ## make .venv from requirements.lock (uv when it is on the PATH, else pip)
	@.ci/setup

answer: setup ## the demo study; for your own tables: make answer FLEET=folder [TASKS=...] [RISK=...]
	@$(BIN)/labkit $(if $(FLEET),answer "$(FLEET)" $(if $(TASKS),--tasks "$(TASKS)") $(if $(RISK),--risk "$(RISK)"),run demo)

test: style ## every check: style, types, layers, notebooks and all tests (not the benchmarks)
	$(BIN)/python -m pytest $(PYTEST)

lint: style ## every check but the tests
	$(BIN)/python -m pytest -q tests/test_layers.py tests/test_notebooks_clean.py

style: setup
	$(BIN)/ruff check
	$(BIN)/ruff format --check
	$(BIN)/mypy
	$(STRIP) --verify notebooks/*.ipynb

format: setup ## format code and notebooks, and mend what ruff can mend
	$(BIN)/ruff check --fix --exit-zero
	$(BIN)/ruff format

strip: setup ## take outputs and run marks out of the notebooks
	$(STRIP) notebooks/*.ipynb

bench: setup ## speed and memory (minutes; keep the machine quiet)
	$(BIN)/python -m pytest tests/benchmarks -s

fuzz: setup ## ten thousand spoilt inputs for each reader (minutes)
	FUZZ_INPUTS=10000 $(BIN)/python -m pytest -q tests/fuzz -n 2 --dist load

readme: answer ## remake the answer table and figure that README.md shows
	$(BIN)/python .readme/update.py

# Loopback and a token come last, so that they win over any configuration and over LAB, which is for other flags.
lab: setup ## JupyterLab on this machine only, opened at the project
	@exec $(BIN)/python .lab/start.py $(LAB)

lock: ## remake requirements.lock after a change in pyproject.toml (needs uv; UPGRADE=--upgrade for newer versions)
	@command -v $(UV) >/dev/null || { echo "make lock needs uv on the PATH, or its place: make lock UV=..." >&2; exit 1; }
	$(UV) pip compile pyproject.toml --extra dev --universal --python-version 3.11 --generate-hashes \
		--no-emit-index-url --no-header --no-annotate --quiet $(UPGRADE) -o requirements.lock
