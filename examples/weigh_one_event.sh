#!/usr/bin/env bash
# What is the lens of one long event (invented), first from its light curve alone, then with its Einstein radius too?
set -euo pipefail
lensrate odds --t-E 120 --t-E-err 3 --pi-E 0.08 --pi-E-err 0.008 --at 1.2 -2.9 "$@"
lensrate odds --t-E 120 --t-E-err 3 --pi-E 0.08 --pi-E-err 0.008 --theta-E 4.1 --theta-E-err 0.4 --at 1.2 -2.9 "$@"
