#!/usr/bin/env bash
# One made-up season of the invented Marram survey: events drawn from the forecast, found or not, as a table.
set -euo pipefail
lensrate events --campaign marram --kicks none --seed 31 --detected --save season.ecsv --plot season.png "$@"
