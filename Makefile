PYTHON ?= .venv/bin/python

.PHONY: check lint types test samples

check: lint types test  ## what CI runs

lint:
	$(PYTHON) -m ruff format --check .
	$(PYTHON) -m ruff check .

types:
	$(PYTHON) -m mypy

test:
	$(PYTHON) -m pytest -n auto

samples:
	$(PYTHON) sample_images/make_samples.py
