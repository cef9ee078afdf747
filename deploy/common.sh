# Shared by deploy/demo.sh and tests/run.sh: what is missing is installed, then the tree is built.
# POSIX sh; sourced with $root set to the checkout.

say() { printf '%s\n' "$*" >&2; }

# Usage: need build | need "build test". Installs the packages of these groups that are missing.
need() {
  command -v dpkg-query >/dev/null 2>&1 || {
    say "tailweir: this script installs Debian 12 packages and finds no dpkg here;"
    say "install what deploy/packages.txt lists by other means and build with cmake"
    exit 69
  }
  missing=
  while read -r group package; do
    case " $1 " in *" $group "*) ;; *) continue ;; esac
    status=$(dpkg-query -W -f '${Status}' "$package" 2>/dev/null || true)
    [ "$status" = 'install ok installed' ] || missing="$missing $package"
  done <<EOF
$(grep -v '^#' "$root/deploy/packages.txt")
EOF
  [ -z "$missing" ] && return 0
  as_root=
  if [ "$(id -u)" != 0 ]; then
    if command -v sudo >/dev/null 2>&1 && sudo -n true 2>/dev/null; then
      as_root=sudo
    else
      say "tailweir: packages are missing and this is not root; run"
      say "  apt-get install --no-install-recommends$missing"
      say "as root, then this script again"
      exit 69
    fi
  fi
  say "tailweir: installing$missing"
  $as_root env DEBIAN_FRONTEND=noninteractive apt-get update -qq >&2 || say "tailweir: apt-get update failed, going on with what is known"
  # shellcheck disable=SC2086
  $as_root env DEBIAN_FRONTEND=noninteractive apt-get install -y -qq --no-install-recommends $missing >&2 || {
    say "tailweir: apt-get could not install$missing"
    exit 69
  }
}

# Usage: build DIRECTORY CMAKE_ARGUMENTS... Configures and builds; quiet unless it fails.
build() {
  directory=$1
  shift
  launcher=
  command -v ccache >/dev/null 2>&1 && launcher=-DCMAKE_CXX_COMPILER_LAUNCHER=ccache
  cmake -S "$root" -B "$directory" -G Ninja $launcher "$@" >"$root/.build-log" 2>&1 || {
    cat "$root/.build-log" >&2
    say "tailweir: configuring failed"
    exit 70
  }
  if [ -t 2 ]; then
    cmake --build "$directory" >&2 || exit 70
  else
    cmake --build "$directory" >"$root/.build-log" 2>&1 || {
      tail -n 60 "$root/.build-log" >&2
      say "tailweir: building failed"
      exit 70
    }
  fi
  rm -f "$root/.build-log"
}
