#!/bin/sh
# Shows what trajcage does on the sample data. Needs Python 3.11 or later with pip and
# venv; builds an environment of its own in .venv-demo (about 400 MB, kept) and leaves
# its results in demo-output.
set -eu
cd "$(dirname "$0")/.."
. scripts/environment.sh
make_environment .venv-demo
mkdir -p demo-output

show() {
    printf '\n$ trajcage %s\n' "$*"
    "$bin/trajcage" "$@"
}

fluid=sample-data/batch7-fluid
show inspect $fluid.gro $fluid.xtc --diameter 1.62
show measure $fluid.gro $fluid.xtc --diameter 1.62 -o demo-output/fluid.h5 --overwrite
show summary demo-output/fluid.h5
show measure sample-data/batch9-glass.lammpstrj -o demo-output/glass.h5 --overwrite
show breaks demo-output/glass.h5 --limit 5
show lattice fcc --packing-fraction 0.58
show plot demo-output/glass.h5 -o demo-output/glass-figures --overwrite
show report demo-output/fluid.h5 -o demo-output/fluid.html --overwrite

printf '\nThe results are in demo-output: fluid.h5, glass.h5, glass-figures, fluid.html.\n'
