#!/bin/sh
# Installs what is needed (Debian 12), builds, runs the tests.
#   sh tests/run.sh [--slow | --brief] [--preset NAME] [CTEST ARGUMENTS...]
# --slow adds the tests labelled slow, --brief leaves out the statistical ones;
# --preset takes deploy/presets/NAME.cmake (asan, tsan, ...).
set -eu
root=$(cd "$(dirname "$0")/.." && pwd)
. "$root/deploy/common.sh"
preset=release
excluded=slow
while [ $# -gt 0 ]; do
  case $1 in
    --slow) excluded=none ;;
    --brief) excluded='slow|statistical' ;;
    --preset)
      shift
      preset=${1:?--preset needs a name}
      ;;
    --help)
      sed -n '2,5s/^# \{0,1\}//p' "$0"
      exit 0
      ;;
    *) break ;;
  esac
  shift
done
[ -f "$root/deploy/presets/$preset.cmake" ] || {
  say "tailweir: no preset '$preset'; one of: $(cd "$root/deploy/presets" && ls | sed 's/\.cmake$//' | tr '\n' ' ')"
  exit 64
}
need "build test"
say "tailweir: building (some minutes the first time)"
build "$root/build/$preset" -C "$root/deploy/presets/$preset.cmake" -DTAILWEIR_TESTS=ON
cd "$root/build/$preset"
exec ctest --output-on-failure -j "$(nproc)" --label-exclude "$excluded" "$@"
