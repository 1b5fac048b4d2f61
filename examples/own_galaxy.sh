#!/usr/bin/env bash
# One's own Galaxy set and lens class: the scenario file states only what differs from the default.
set -euo pipefail
here=$(cd "$(dirname "$0")" && pwd)
lensrate scenario "$here/own_galaxy.toml"
lensrate sightline 1.0 -3.9 --scenario "$here/own_galaxy.toml" --plot own_galaxy.png "$@"
