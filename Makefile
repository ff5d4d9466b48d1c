# Needs Python 3 and make, nothing else; everything that is fetched or made stays in this folder.
# `make help` lists the targets.

PYTHON3 ?= python3
PYTHON := .venv/bin/python
UV = $(firstword $(wildcard .tools/uv-*/bin/uv))
PYTEST_ARGUMENTS ?=
export UV_SYSTEM_CERTS := 1

.DEFAULT_GOAL := help
.NOTPARALLEL:
.PHONY: help demo test check bench format lock clean-demo environment environment-dev

help: ## List the targets
	@sed -n 's/^\([a-z-]*\):.*## \(.*\)/\1|\2/p' $(MAKEFILE_LIST) | while IFS='|' read -r name text; \
	  do printf '  make %-12s %s\n' "$$name" "$$text"; done

demo: environment ## Run the whole service here with an invented scenario, until Ctrl-C (STEELYARD_PORT to move it)
	@exec $(PYTHON) -m config.services demo

test: check ## Run every check and test that needs no outside server
	@exec $(PYTHON) -m pytest -n 2 --dist loadgroup $(PYTEST_ARGUMENTS)

check: environment-dev ## Run the checks of style, types and imports alone
	$(PYTHON) -m ruff check .
	$(PYTHON) -m ruff format --check .
	$(PYTHON) -m mypy analysis/methods
	$(PYTHON) -c "from importlinter.cli import lint_imports_command as run; run()"

bench: environment-dev ## Measure against named yardsticks (BENCH_JSON=1 for one JSON object a line)
	@exec $(PYTHON) -m benchmarks

format: environment-dev ## Put every file into the house format
	$(PYTHON) -m ruff check --fix .
	$(PYTHON) -m ruff format .

lock: environment-dev ## Write the lock files anew from pyproject.toml
	$(UV) pip compile pyproject.toml --universal --generate-hashes --no-header --output-file requirements.txt
	$(UV) pip compile pyproject.toml --group dev --universal --generate-hashes --no-header --output-file requirements-dev.txt

clean-demo: environment ## Delete the demo's data, keys and logs
	@exec $(PYTHON) -m config.services clean-demo

environment:
	@$(PYTHON3) config/services/bootstrap.py requirements.txt

environment-dev:
	@$(PYTHON3) config/services/bootstrap.py requirements-dev.txt
