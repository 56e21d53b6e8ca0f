#!/bin/sh
# Installs oddbranch into a folder of its own: deploy/build.sh /opt/oddbranch [serve|all|none]
# The same steps on a bare machine and in the container file. Needs Python 3.11 or later
# with venv, and pip's package registry.
#
# Last it compiles the kernels into PREFIX/kernels, so that the first start is as quick as
# any: `serve` those of the service, `all` those of learning too, `none` leaves it out.
set -eu

prefix=${1:?"usage: deploy/build.sh PREFIX [serve|all|none]"}
kernels=${2:-serve}
source=$(cd "$(dirname "$0")/.." && pwd)
case $kernels in serve | all | none) ;; *)
    echo "deploy/build.sh: $kernels: say serve, all or none" >&2
    exit 2
    ;;
esac

"${PYTHON:-python3}" -m venv "$prefix"
"$prefix/bin/python" -m pip install --quiet --disable-pip-version-check \
    --constraint "$source/deploy/constraints.txt" "$source[postgresql]"

if [ "$kernels" != none ]; then
    NUMBA_CACHE_DIR="$prefix/kernels" "$prefix/bin/python" "$source/deploy/warm.py" "$kernels"
    # Whoever runs it only reads them.
    chmod -R a+rX "$prefix/kernels"
fi
"$prefix/bin/oddbranch" --version
