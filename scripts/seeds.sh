#!/usr/bin/env bash
# Whole runs on every simulated board over many seeds, held against their truth: scripts/seeds.sh [SEEDS], 20 unless told.
set -euo pipefail
cd "$(dirname "$0")/.."
export RINGSTEP_SEEDS="${1:-20}"
exec cargo test --release --test tests seeds:: -- --nocapture
