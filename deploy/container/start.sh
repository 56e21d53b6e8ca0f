#!/bin/sh
# Puts the kernels that were compiled at the build where they can be read and written, then
# becomes the command.
set -eu
if [ ! -d "$NUMBA_CACHE_DIR" ]; then
    mkdir -p "$NUMBA_CACHE_DIR"
    cp -r "${INSTALLED:-/opt/oddbranch}/kernels/." "$NUMBA_CACHE_DIR/"
fi
exec "${INSTALLED:-/opt/oddbranch}/bin/oddbranch" "$@"
