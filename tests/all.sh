#!/bin/sh
# Every check that a change must pass, and what the checks need, installed where it can be:
#
#     sh tests/all.sh
#
# It works from any folder, needs no terminal, stops at the first step that fails and names it.
# FALLOWBAND_RECORDINGS names a folder of off-air recordings; ../shared/recordings is taken where
# there is one. Tests that find no recordings, or no browser, are skipped and say so; where this
# script finds them, skipping is a failure.
set -eu

cd "$(dirname -- "$0")/.."

step() {
    title=$1
    shift
    printf '\n== %s: %s\n' "$title" "$*"
    status=0
    "$@" || status=$?
    if [ "$status" -ne 0 ]; then
        printf '\nFAILED: %s (exit code %s)\n' "$title" "$status" >&2
        exit 1
    fi
}

# install PACKAGE...: with Debian's packages, where we may.
install() {
    [ "$(id -u)" -eq 0 ] && command -v apt-get >/dev/null 2>&1 || return 1
    printf '\n== installing: %s\n' "$*"
    DEBIAN_FRONTEND=noninteractive
    export DEBIAN_FRONTEND
    apt-get update -q && apt-get install -y -q --no-install-recommends "$@"
}

has() {
    command -v "$1" >/dev/null 2>&1
}

# A shell without a login may not have Rust's own folder on its path.
if ! has cargo && [ -x "${HOME:-}/.cargo/bin/cargo" ]; then
    PATH=$HOME/.cargo/bin:$PATH
    export PATH
fi
if ! has cargo; then
    printf 'FAILED: there is no cargo; install Rust 1.90 or newer (https://rustup.rs)\n' >&2
    exit 1
fi
if has rustup; then
    cargo fmt --version >/dev/null 2>&1 || rustup component add rustfmt
    cargo clippy --version >/dev/null 2>&1 || rustup component add clippy
fi
# SQLite is compiled from its source.
has cc || install gcc libc6-dev || printf '\n== no C compiler: the build will fail\n'

has chromium || has chromium-browser || install chromium || true
if has chromium || has chromium-browser; then
    FALLOWBAND_REQUIRE_BROWSER=1
    export FALLOWBAND_REQUIRE_BROWSER
else
    printf '\n== NO BROWSER: the test of the page will be SKIPPED; install chromium to run it\n'
fi

if [ -n "${FALLOWBAND_RECORDINGS:-}" ] || [ -d ../shared/recordings ]; then
    FALLOWBAND_REQUIRE_RECORDINGS=1
    export FALLOWBAND_REQUIRE_RECORDINGS
else
    printf '\n== NO RECORDINGS: their tests will be SKIPPED; name a folder in FALLOWBAND_RECORDINGS\n'
fi

step 'format' cargo fmt --check
step 'lints' cargo clippy --release --all-targets -- -D warnings
step 'documentation' env RUSTDOCFLAGS='-D warnings' cargo doc --release --no-deps
step 'examples in the documentation' cargo test --release --doc
if cargo nextest --version >/dev/null 2>&1; then
    step 'tests' cargo nextest run --release
else
    step 'tests' cargo test --release --lib --bins --tests
fi

printf '\nall checks passed\n'
