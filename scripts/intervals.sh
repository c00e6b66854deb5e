#!/usr/bin/env bash
# Coverage of the stated intervals over 200 cases of the circuit simulator's boards.
set -euo pipefail
cd "$(dirname "$0")/.."
exec cargo test --release --test tests intervals_hold_over_many_seeds -- --ignored --nocapture
