#!/usr/bin/env bash
# How well would ten seasons of the invented Marram survey constrain the scale of natal kicks?
set -euo pipefail
lensrate constrain --from marram -p kick_scale --seasons 10 "$@"
