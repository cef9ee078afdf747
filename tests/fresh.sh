#!/bin/sh
# Proves the two commands of the README on a fresh Debian 12: a minimal root by debootstrap, a clean
# clone of HEAD in it, `sh deploy/demo.sh --quick` and `sh tests/run.sh`, each timed. Root only.
# Takes the package mirror from this machine's own apt settings.
set -eu
root=$(cd "$(dirname "$0")/.." && pwd)
say() { printf '%s\n' "$*" >&2; }
[ "$(id -u)" = 0 ] || {
  say "tests/fresh.sh: needs root (debootstrap and chroot)"
  exit 69
}
command -v debootstrap >/dev/null 2>&1 || DEBIAN_FRONTEND=noninteractive apt-get install -y -qq --no-install-recommends debootstrap >/dev/null
work=$(mktemp -d /var/tmp/tailweir-fresh.XXXXXX)
target=$work/root
cleanup() {
  umount -l "$target/proc" 2>/dev/null || true
  umount -l "$target/dev" 2>/dev/null || true
  rm -rf --one-file-system "$work"
}
trap cleanup EXIT INT TERM

# The first archive this machine installs from, in the one-line or the deb822 format.
mirror=$(cat /etc/apt/sources.list /etc/apt/sources.list.d/*.list 2>/dev/null |
  sed -n 's/^deb  *\(\[[^]]*\] *\)\{0,1\}\([^ ]*\) .*/\2/p' | head -n 1)
[ -n "$mirror" ] || mirror=$(cat /etc/apt/sources.list.d/*.sources 2>/dev/null | sed -n 's/^URIs: *\([^ ]*\).*/\1/p' | head -n 1)
[ -n "$mirror" ] || {
  say "tests/fresh.sh: no package archive in /etc/apt"
  exit 69
}
start=$(date +%s)
debootstrap --variant=minbase bookworm "$target" "$mirror" >"$work/debootstrap.log" 2>&1 || {
  tail -n 20 "$work/debootstrap.log" >&2
  say "tests/fresh.sh: debootstrap failed"
  exit 74
}
cp -a /etc/apt/sources.list /etc/apt/sources.list.d /etc/apt/apt.conf.d /etc/apt/trusted.gpg.d "$target/etc/apt/" 2>/dev/null || true
[ -d /usr/local/share/ca-certificates ] && cp -a /usr/local/share/ca-certificates "$target/usr/local/share/" || true
[ -f /etc/ssl/certs/ca-certificates.crt ] && mkdir -p "$target/etc/ssl/certs" && cp -L /etc/ssl/certs/ca-certificates.crt "$target/etc/ssl/certs/" || true
cp -L /etc/resolv.conf /etc/hosts "$target/etc/" 2>/dev/null || true
mount -t proc proc "$target/proc"
mount --bind /dev "$target/dev"
git clone -q --no-local "$root" "$target/srv/tailweir"
say "fresh root ready in $(($(date +%s) - start)) s"

inside() {
  begun=$(date +%s)
  chroot "$target" /usr/bin/env -i PATH=/usr/sbin:/usr/bin:/sbin:/bin HOME=/root LANG=C.UTF-8 \
    http_proxy="${http_proxy:-}" https_proxy="${https_proxy:-}" sh -c "cd /srv/tailweir && $1" || {
    say "tests/fresh.sh: '$1' failed in the fresh root"
    exit 70
  }
  took=$(($(date +%s) - begun))
  say "fresh: '$1' took $took s"
}
inside 'sh deploy/demo.sh --quick'
inside 'sh tests/run.sh'
inside 'sh deploy/demo.sh --quick --calm'
say "fresh: both commands work on a machine with nothing installed"
