# make help lists the targets. All of them set up .venv first where that is missing or out of date.
.POSIX:
.PHONY: help setup setup-run demo test test-long lint format bench clean distclean

PYTHON = .venv/bin/python
PYTEST_OPTIONS =
WORKERS = 2
JOB = jobs/film-first.toml
RANKS = 2

help:
	@echo 'make setup      install what is missing (Debian 12), make .venv; seconds when all is there'
	@echo 'make demo       solve $(JOB) on $(RANKS) ranks and show the result'
	@echo 'make test       run the tests (PYTEST_OPTIONS="-k name" chooses, WORKERS=1: one by one)'
	@echo 'make test-long  run the tests marked long, too'
	@echo 'make lint       check style, types, docstrings, spelling'
	@echo 'make format     let ruff format the code'
	@echo 'make bench      run the benchmarks of scaling/'
	@echo 'make clean      remove caches; make distclean removes .venv as well'

setup:
	@.ci/setup.sh dev

setup-run:
	@.ci/setup.sh run

demo: setup-run
	rm -rf runs/demo
	.venv/bin/lattice solve $(JOB) --ranks $(RANKS) --out runs/demo
	@$(PYTHON) .ci/show_summary.py runs/demo

test: setup
	$(PYTHON) -m pytest -n $(WORKERS) --dist loadfile $(PYTEST_OPTIONS)

test-long: setup
	$(PYTHON) -m pytest -n $(WORKERS) --dist loadfile -m 'long or not long' $(PYTEST_OPTIONS)

lint: setup
	.venv/bin/ruff check
	.venv/bin/ruff format --check
	.venv/bin/mypy
	find lattice -name '*.py' -exec .venv/bin/numpydoc lint {} +
	.venv/bin/codespell
	@if command -v shellcheck >/dev/null; then \
		git ls-files -z '*.sh' .ci/run | xargs -0 shellcheck && echo 'shellcheck: passed'; \
	else \
		echo 'shellcheck: NOT RUN, not installed (apt-get install shellcheck)'; \
	fi

format: setup
	.venv/bin/ruff check --fix
	.venv/bin/ruff format

bench: setup
	$(PYTHON) -m scaling.kernels
	$(PYTHON) -m scaling.flatness --quick
	$(PYTHON) -m scaling.compare --sizes 1d-14k

clean:
	rm -rf .pytest_cache .mypy_cache .ruff_cache .hypothesis build dist *.egg-info
	find . -name __pycache__ -type d -not -path './.venv/*' -prune -exec rm -rf {} +

distclean: clean
	rm -rf .venv
