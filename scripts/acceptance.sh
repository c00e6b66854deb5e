#!/usr/bin/env bash
# What is accepted as a ring and what is refused, over 10,000 valid and 10,000 invalid records.
set -euo pipefail
cd "$(dirname "$0")/.."
exec cargo test --release -p ringstep-analysis --test analysis ten_thousand_records -- --ignored --nocapture
