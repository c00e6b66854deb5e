#!/usr/bin/env bash
# The one gate: format, lints, the README's test command, documentation, and the list of skipped tests.
set -euo pipefail
cd "$(dirname "$0")/.."

skips="$PWD/target/skipped-tests.txt"
mkdir -p target
: >"$skips"
export RINGSTEP_SKIPS="$skips"

step() { printf '\n== %s\n' "$*"; }

step format
cargo fmt --all --check
step lints
cargo clippy --quiet --workspace --all-targets -- -D warnings
cargo clippy --quiet --features visa -- -D warnings
step "tests: the README's command"
command=$(sed -n 's/^    \(cargo test.*\)$/\1/p' README.md | head -n 1)
[ -n "$command" ] || { echo "README.md states no test command" >&2; exit 1; }
echo "$command"
$command
step documentation
RUSTDOCFLAGS="-D warnings" cargo doc --quiet --no-deps --workspace

step "skipped tests"
if [ -s "$skips" ]; then
  sort -u "$skips"
  if [ -n "${CI:-}" ]; then echo "nothing may be skipped here" >&2; exit 1; fi
else
  echo none
fi
