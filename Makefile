# levelbook: `make demo` shows the main job, `make test` proves it. Both make what they need in .venv.

PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin
ARGS ?=
FIRMWARE := /usr/share/firmware-microbit-micropython/firmware.hex
WASM := build/wasm/node_modules/@micropython/micropython-webassembly-pyscript

.PHONY: demo test bench chaos fuzz lint clean tools

demo: $(BIN)/levelbook
	$(BIN)/levelbook demo $(ARGS)

test: $(BIN)/levelbook-test tools
	$(BIN)/python -m pytest -n 2 --dist loadfile $(ARGS)

bench: $(BIN)/levelbook-test
	$(BIN)/python -m tests.bench $(ARGS)

chaos: $(BIN)/levelbook-test tools
	$(BIN)/python -m tests.chaos $(ARGS)

fuzz: $(BIN)/levelbook-test
	$(BIN)/python -m tests.fuzz_wire $(ARGS)

lint: $(BIN)/levelbook-test
	$(BIN)/ruff check .
	$(BIN)/ruff format --check .
	$(BIN)/mypy

clean:
	rm -rf $(VENV) build dist *.egg-info .pytest_cache .hypothesis .mypy_cache .ruff_cache demo-book

$(BIN)/python:
	$(PYTHON) -c "import sys; sys.exit(sys.version_info < (3, 11) and 'levelbook wants Python 3.11 or newer: make PYTHON=python3.12')"
	$(PYTHON) -m venv $(VENV)

$(BIN)/levelbook: $(BIN)/python pyproject.toml
	$(BIN)/pip install --quiet --disable-pip-version-check --editable .
	touch $@

$(BIN)/levelbook-test: $(BIN)/levelbook
	$(BIN)/pip install --quiet --disable-pip-version-check --editable '.[test]'
	touch $@

# What pip does not bring: Debian packages where this is root on Debian, and the WebAssembly MicroPython by npm. Where one
# cannot be had, the tests that need it are skipped with a line that says what to install.
tools:
	@missing=""; \
	for need in mosquitto:mosquitto qemu-system-arm:qemu-system-arm node:nodejs npm:npm psql:postgresql; do \
	  command -v $${need%%:*} >/dev/null || [ -x /usr/sbin/$${need%%:*} ] || missing="$$missing $${need##*:}"; done; \
	[ -e $(FIRMWARE) ] || missing="$$missing firmware-microbit-micropython"; \
	if [ -n "$$missing" ] && [ "$$(id -u)" = 0 ] && command -v apt-get >/dev/null; then \
	  apt-get update -qq; \
	  for package in $$missing; do DEBIAN_FRONTEND=noninteractive apt-get install -y -qq $$package >/dev/null; done; fi
	@if command -v npm >/dev/null && [ ! -d $(WASM) ]; then \
	  npm install --loglevel=error --no-package-lock --prefix build/wasm @micropython/micropython-webassembly-pyscript >/dev/null || true; fi
