# Two commands for a machine with Python 3.11 or newer, make and git: `make demo` and `make test`.
PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin
DEMO_RUN := runs/curved_lcdm

.PHONY: demo paper test lint bench bench-dense fuzz soak dist oldest clean

demo: $(VENV)/.installed
	$(BIN)/mufitter fit configs/curved_lcdm.yaml --replace
	@echo "Corner plot: $(DEMO_RUN)/figures/corner.pdf and corner.png"

# Three models on the invented survey, and a folder with all figures, tables and a manuscript; set where there is a LaTeX.
paper: $(VENV)/.installed
	for model in curved_lcdm flat_wcdm flat_w0wa; do \
		test -f runs/$$model/figures_data.h5 || $(BIN)/mufitter fit configs/$$model.yaml --run-folder runs/$$model --replace --quiet || exit 1; \
	done
	$(BIN)/mufitter paper runs/curved_lcdm runs/flat_wcdm runs/flat_w0wa --to paper
	@if command -v pdflatex >/dev/null && command -v bibtex >/dev/null; then \
		cd paper && pdflatex -interaction=nonstopmode -halt-on-error manuscript >/dev/null && bibtex manuscript >/dev/null \
		&& pdflatex -interaction=nonstopmode -halt-on-error manuscript >/dev/null \
		&& pdflatex -interaction=nonstopmode -halt-on-error manuscript >/dev/null && echo "Manuscript: paper/manuscript.pdf"; \
	else echo "No LaTeX here: paper/manuscript.tex is ready for one."; fi

test: $(VENV)/.installed-test lint
	OPENBLAS_NUM_THREADS=1 $(BIN)/python -m pytest -n 2 --dist loadfile

lint: $(VENV)/.installed-test
	$(BIN)/ruff check .
	$(BIN)/ruff format --check .
	$(BIN)/mypy

# Ratios of times measured in one run; run them on a quiet machine.
bench: $(VENV)/.installed-test
	$(BIN)/python tests/benchmarks/bench.py
	$(BIN)/python tests/benchmarks/scale.py

# A dense covariance of 20,000 supernovae: minutes, and 5 GB of memory and of disk.
bench-dense: $(VENV)/.installed-test
	$(BIN)/python tests/benchmarks/scale.py --dense

# Damaged configs, tables and matrices by the hundred thousand: minutes.
fuzz: $(VENV)/.installed-test
	$(BIN)/python -m pytest --hypothesis-profile=soak tests/sample/test_sample_fuzz.py tests/test_fuzz.py

# Random configs, tables and matrices by the thousand, for hours; `make test` runs the short version.
soak: $(VENV)/.installed-test
	MUFITTER_SOAK=200 $(BIN)/python -m pytest --hypothesis-profile=soak tests

# Source distribution and wheel, in dist/.
dist: $(VENV)/.installed-test
	$(BIN)/python -m pip install --quiet build
	rm -rf dist && $(BIN)/python -m build

# The oldest versions that pyproject.toml admits, in an environment of their own.
oldest:
	$(PYTHON) -m venv .venv-oldest
	.venv-oldest/bin/python -m pip install --quiet --constraint .ci/oldest.txt . pytest hypothesis
	.venv-oldest/bin/python -m pytest --override-ini addopts="-q --import-mode=importlib" \
		tests/test_api.py tests/test_cli.py tests/config tests/sample/test_sample_tables.py tests/report/test_page.py

clean:
	rm -rf build dist .pytest_cache .ruff_cache .hypothesis .benchmarks *.egg-info
	find fitter tests -name __pycache__ -type d -prune -exec rm -rf {} +

$(BIN)/python:
	$(PYTHON) -c 'import sys; sys.exit("mufitter needs Python 3.11 or newer, found " + sys.version.split()[0] + "; try make PYTHON=python3.12") if sys.version_info < (3, 11) else 0'
	$(PYTHON) -m venv $(VENV)

$(VENV)/.installed: pyproject.toml | $(BIN)/python
	$(BIN)/python -m pip install --quiet --editable .
	@touch $@

$(VENV)/.installed-test: pyproject.toml | $(BIN)/python
	$(BIN)/python -m pip install --quiet --editable '.[test]'
	@touch $@ $(VENV)/.installed
