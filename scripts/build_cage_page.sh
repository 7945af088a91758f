#!/bin/sh
# Builds trajcage/plots/cage_page.js, the script of the page of one cage: three.js and
# scripts/cage_page/cage.js in one file, with the license of three.js at its head. For
# maintainers, after a change of cage.js or of a version in package.json; needs npm.
set -eu
cd "$(dirname "$0")/.."
target=$PWD/trajcage/plots/cage_page.js
work=$(mktemp -d)
trap 'rm -rf "$work"' EXIT
cp scripts/cage_page/* "$work"
cd "$work"
npm ci --silent --no-audit --no-fund
{
    echo '/*! Built by scripts/build_cage_page.sh; do not edit. It contains three.js:'
    cat node_modules/three/LICENSE
    echo '*/'
    npm run --silent build
} > bundle.js
mv bundle.js "$target"
wc -c "$target"
