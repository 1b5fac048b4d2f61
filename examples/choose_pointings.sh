#!/usr/bin/env bash
# Before a season: where would the invented Marram survey find most black-hole events with one field of 1 deg2?
set -euo pipefail
lensrate skymap --l -1 4 --b -4 -2.5 --step 0.5 --sources limit:I=20 \
    --rank black_hole --field-area 1.0 --top 5 --save pointings.fits --save-ranking pointings.ecsv \
    --plot pointings.png --picture rate_per_deg2_black_hole --overlay marram "$@"
