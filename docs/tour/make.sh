#!/usr/bin/env bash
# Takes the pictures of docs/tour.md from the demo night. Needs a release build, Node and Chromium.
set -euo pipefail
cd "$(dirname "$0")/../.."
scratch=$(mktemp -d)
trap 'rm -rf "$scratch"' EXIT
build/release/apps/duskgrid build data/demo_night/night.toml --out "$scratch" --quiet >/dev/null ||
  [ $? -eq 4 ] # one name cannot be marked
node docs/tour/pictures.mjs "$scratch/2031-03-14/report" docs/tour
