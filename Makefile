# Two commands do everything on a fresh machine: make demo, make test.
PYTHON ?= $(shell for p in python3 python3.13 python3.12 python3.11; do $$p -c "import sys; sys.exit(sys.version_info < (3, 11))" 2>/dev/null && echo $$p && break; done)
BIN := .venv/bin
ONE_THREAD := OMP_NUM_THREADS=1 OPENBLAS_NUM_THREADS=1 MKL_NUM_THREADS=1 NUMBA_NUM_THREADS=1

.PHONY: demo test bench lint study faults fuzz clean docs screenshots wheel
demo: .venv/.core
	$(BIN)/leadline demo leadline-demo

test: .venv/.dev
	$(ONE_THREAD) $(BIN)/python -m pytest -n 2 --dist worksteal --doctest-modules align tests

bench: .venv/.dev .venv/.bench
	$(ONE_THREAD) $(BIN)/python -m tests.benchmarks $(BENCH)

lint: .venv/.dev
	$(BIN)/ruff check align plugins tests
	$(BIN)/ruff format --check align plugins tests
	$(BIN)/mypy
	$(BIN)/lint-imports

study: .venv/.dev
	$(ONE_THREAD) $(BIN)/python -m tests.studies

# kills everything that writes at more than 200 moments of each, about an hour; FAULTS="run=20" for less
faults: .venv/.dev
	$(ONE_THREAD) $(BIN)/python -m tests.faults $(FAULTS)

# a million spoilt files, then cases that grow by coverage; FUZZ="nrrd --cases 1000" for less
FUZZ ?= --cases 32000 --seconds 600
fuzz: .venv/.dev
	$(BIN)/python -m pip install -q --disable-pip-version-check -c constraints.txt -e '.[fuzz]'
	$(ONE_THREAD) nice -n 15 $(BIN)/python -m tests.fuzz $(FUZZ)
	$(ONE_THREAD) nice -n 15 $(BIN)/python -m tests.fuzz $(FUZZ) --guided --seconds 60

docs: .venv/.dev
	$(BIN)/python -m pdoc --docformat numpy -o docs/reference leadline '!leadline.demo'

screenshots: demo .venv/.dev
	$(BIN)/python -m tests.pictures leadline-demo docs/pictures
	xvfb-run -a -s "-screen 0 2600x1700x24" $(BIN)/python -m tests.leadline_napari.screenshots docs/pictures --brain leadline-demo

# The wheel in an environment that has nothing else: what it needs is declared, and its data files are in it.
wheel: .venv/bin/python
	rm -rf .venv/wheel && mkdir -p .venv/wheel
	$(BIN)/python -m pip wheel -q --disable-pip-version-check --no-deps -w .venv/wheel .
	$(PYTHON) -m venv .venv/wheel/clean
	.venv/wheel/clean/bin/python -m pip install -q --disable-pip-version-check --no-compile -c constraints.txt .venv/wheel/*.whl
	cd .venv/wheel && clean/bin/python -m leadline.demo.write brain --small && clean/bin/leadline check brain
	cd .venv/wheel && clean/bin/python -c "import leadline_napari; from importlib.resources import files as f; assert all((f(p) / n).is_file() for p, n in (('leadline_napari', 'napari.yaml'), ('leadline.anchoring', 'knowledge.toml'), ('leadline.report', 'page.css')))"
	rm -rf .venv/wheel

clean:
	rm -rf .venv leadline-demo

.venv/bin/python:
	$(PYTHON) -m venv .venv

.venv/.core: .venv/bin/python pyproject.toml constraints.txt
	$(BIN)/python -m pip install -q --disable-pip-version-check -c constraints.txt -e .
	touch $@

.venv/.dev: .venv/bin/python pyproject.toml constraints.txt
	$(BIN)/python -m pip install -q --disable-pip-version-check -c constraints.txt -e '.[dev]'
	touch $@ .venv/.core

# What registration is measured against wants libraries of its own. Where it cannot be had, the benchmark says so.
.venv/.bench: .venv/bin/python pyproject.toml
	$(PYTHON) -m venv .venv/bench
	-.venv/bench/bin/python -m pip install -q --disable-pip-version-check -e '.[bench]'
	touch $@
