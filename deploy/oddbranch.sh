#!/bin/sh
# /usr/local/bin/oddbranch: the command as the user that owns the records, in its folder.
cd /var/lib/oddbranch
exec runuser -u oddbranch -- env NUMBA_CACHE_DIR=/var/cache/oddbranch \
    /opt/oddbranch/bin/oddbranch "$@"
