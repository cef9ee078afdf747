#!/bin/sh
# Installs what is needed (Debian 12), builds, runs `tailweir demo` with the arguments given here.
set -eu
root=$(cd "$(dirname "$0")/.." && pwd)
. "$root/deploy/common.sh"
need build
say "tailweir: building (some minutes the first time)"
build "$root/build/demo" -DTAILWEIR_TESTS=OFF
exec "$root/build/demo/service/tailweir" demo "$@"
