# Two commands do everything: `make demo` runs the main job on the mock bench, `make test` passes all tests.
.PHONY: demo test lint doc bench clean

demo:
	@.ci/prepare build
	@cargo build --release --quiet
	@target/release/darkline scan sequences/coil-constant.toml --bench mock/bench.toml --mock --into runs

test:
	@.ci/prepare test
	DARKLINE_PYTHON=$(CURDIR)/target/python/bin/python cargo test --workspace

lint:
	cargo fmt --all --check
	cargo clippy --workspace --all-targets -- -D warnings

doc:
	RUSTDOCFLAGS="-D warnings" cargo doc --workspace --no-deps

# Ratios within one run; see the head of each file for what it compares with.
bench:
	@.ci/prepare test
	DARKLINE_PYTHON=$(CURDIR)/target/python/bin/python cargo bench --workspace

clean:
	cargo clean
