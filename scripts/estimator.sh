#!/usr/bin/env bash
# The tables of the estimator: errors over oracle and bound, against exact least squares, coverage of intervals, and leakage rings on
# drooping plateaus: scripts/estimator.sh [SHARE [TABLE]], with SHARE of the usual records (1 unless told) and one of the tables
# bound, least_squares, intervals, plateau.
set -euo pipefail
cd "$(dirname "$0")/.."
export RINGSTEP_ESTIMATOR_SHARE="${1:-1}"
exec cargo test --release -p ringstep-analysis --test analysis "estimator_table_${2:-}" -- \
  --ignored --nocapture --test-threads 1
