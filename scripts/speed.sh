#!/usr/bin/env bash
# The fit of one damped sinusoid against scipy.optimize.curve_fit, alternated in one run; fails below the targets.
set -euo pipefail
cd "$(dirname "$0")/.."
cargo bench --quiet -p ringstep-analysis --bench fit_speed --no-run
export OMP_NUM_THREADS=1 OPENBLAS_NUM_THREADS=1
exec python3 scripts/speed.py "$@"
