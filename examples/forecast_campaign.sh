#!/usr/bin/env bash
# What the invented Marram survey is expected to find, by class, field and season, with one page of pictures.
set -euo pipefail
lensrate campaign marram --save marram.ecsv --plot marram_page.png "$@"
