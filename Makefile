# One command for each thing one does with a checkout. Everything is installed into .venv.

PYTHON ?= python3
BIN := .venv/bin
RUNS := demo-run

.PHONY: demo quick test check bench soak fuzz goldens clean
.DELETE_ON_ERROR:

.venv/run-stamp: pyproject.toml constraints.txt
	$(PYTHON) -m venv .venv
	$(BIN)/pip install --quiet --disable-pip-version-check -c constraints.txt -e .
	touch $@

.venv/dev-stamp: .venv/run-stamp
	$(BIN)/pip install --quiet --disable-pip-version-check -c constraints.txt -e '.[dev]'
	touch $@

demo: .venv/run-stamp ## the demo lot on the simulated bench, into demo-run/
	rm -rf $(RUNS)
	$(BIN)/ohmward demo --out $(RUNS)

quick: .venv/dev-stamp ## what runs in a minute: no processes, no sockets, nothing long
	$(BIN)/pytest -q -m "not processes and not slow and not soak"

test: .venv/dev-stamp ## the whole suite
	$(BIN)/pytest -q -m "not soak" -n 2 --dist loadfile

check: .venv/dev-stamp ## style, types, layers
	$(BIN)/ruff format --check src tests benchmarks
	$(BIN)/ruff check src tests benchmarks
	$(BIN)/mypy
	$(BIN)/lint-imports

bench: .venv/dev-stamp ## cost, as ratios against a floor in the same run
	for script in benchmarks/*.py; do $(BIN)/python $$script || exit 1; done

soak: .venv/dev-stamp ## long statistical checks
	$(BIN)/pytest -q -m soak

fuzz: .venv/dev-stamp ## hypothesis for longer
	HYPOTHESIS_PROFILE=fuzz $(BIN)/pytest -q -m "not processes and not soak"

goldens: .venv/dev-stamp ## renew the stored output that tests compare with; read the difference
	$(BIN)/pytest -q tests/golden --renew-goldens

clean:
	rm -rf .venv $(RUNS) dist build
