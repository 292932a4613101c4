#!/usr/bin/env bash
# Tests of unsheard: deploy/test.sh [part ...]
#
#   unit     every test that has no part of its own below
#   fault    tests named TestFault...: kills, full and failing disks, lost folders
#   e2e      tests named TestEndToEnd...: the whole program, from files to results
#   browser  tests named TestBrowser...: the pages in Chromium
#   race     the concurrent packages under the race detector, short
#   fuzz     every fuzz target for FUZZTIME (default 5s)
#   bench    every benchmark once, so that none rots
#   lint     gofmt, go vet, staticcheck, shellcheck, module and tree checks
#   build    linux/amd64, linux/arm64, windows/amd64 without cgo
#   all      everything above (default)
#
#   quality  the scoreboard against published methods: takes the better part of
#            an hour and rewrites pipeline/testdata/SCOREBOARD.md, so not in all.
#            QUALITY=ours takes the peers' numbers from the last time, QUALITY=2
#            and higher shoots other scenes and only prints
#
# On Debian, missing tools are installed when run as root and are an error
# otherwise. On other systems the script says what it leaves out.
set -euo pipefail
cd "$(dirname "${BASH_SOURCE[0]}")/.."

FUZZTIME=${FUZZTIME:-5s}
STATICCHECK=honnef.co/go/tools/cmd/staticcheck@v0.8.2
PARTS=(lint build unit fault e2e browser race fuzz bench)
ASKED=(quality) # only when asked for by name
READERS=(hdf5-tools fitsverify libtiff-tools pngcheck octave imagemagick prometheus
  python3-h5py python3-silx python3-astropy python3-tifffile python3-numpy
  python3-scipy python3-skimage python3-jsonschema)
export CGO_ENABLED=0
SCRATCH=$(mktemp -d)
trap 'rm -rf "$SCRATCH"' EXIT

say() { printf '== %s\n' "$*"; }
die() { printf 'test.sh: %s\n' "$*" >&2; exit 1; }

# --- tools -----------------------------------------------------------------

# needs prints the Debian packages that a part uses.
needs() {
  case $1 in
    unit | e2e | fault | quality) printf '%s\n' "${READERS[@]}" ;;
    browser) echo chromium ;;
    lint) printf '%s\n' shellcheck git ;;
    race) printf '%s\n' gcc libc6-dev "${READERS[@]}" ;;
  esac
}

# there tells whether what we use of a package is there. The tests call
# Debian's own Python, /usr/bin/python3, so its modules are looked up there.
there() {
  case $1 in
    hdf5-tools) command -v h5dump ;;
    libtiff-tools) command -v tiffinfo ;;
    imagemagick) command -v convert || command -v magick ;;
    prometheus) command -v promtool ;;
    libc6-dev) test -e /usr/include/stdlib.h ;;
    python3-*) /usr/bin/python3 -c "import importlib.util as u, sys; sys.exit(u.find_spec('${1#python3-}') is None)" ;;
    *) command -v "$1" ;;
  esac >/dev/null 2>&1
}

# missing prints those packages of a part that are not there.
missing() {
  local p
  while read -r p; do
    there "$p" || echo "$p"
  done < <(needs "$1")
}

# install fetches packages without starting their services: the prometheus
# package is here for promtool alone.
install() {
  local rc=0 policy=/usr/sbin/policy-rc.d own=
  say "install $*"
  if [[ ! -e $policy ]]; then
    printf '#!/bin/sh\nexit 101\n' >"$policy"
    chmod 755 "$policy"
    own=$policy
  fi
  export DEBIAN_FRONTEND=noninteractive
  { apt-get -qq update && apt-get -qq -y --no-install-recommends install "$@" >/dev/null; } || rc=$?
  if [[ -n $own ]]; then rm -f "$own"; fi
  return "$rc"
}

on_debian() { grep -qx 'ID=debian' /etc/os-release 2>/dev/null; }

# prepare sees to the tools of a part. LEFT_OUT gets those that are missing
# on a system that is not Debian.
LEFT_OUT=()
prepare() {
  local list
  mapfile -t list < <(missing "$1")
  if [[ ${#list[@]} -eq 0 ]]; then return; fi
  if ! on_debian; then
    LEFT_OUT=("${list[@]}")
    return
  fi
  if [[ $(id -u) -ne 0 ]]; then
    die "$1 needs more tools: apt-get install --no-install-recommends ${list[*]}"
  fi
  install "${list[@]}" || die "$1: apt-get could not install ${list[*]}"
  mapfile -t list < <(missing "$1")
  if [[ ${#list[@]} -ne 0 ]]; then die "$1: still missing after apt-get install: ${list[*]}"; fi
}

# --- parts -----------------------------------------------------------------

# with prints the packages that have a test function of this name.
with() {
  { grep -rlE --include='*_test.go' "^func $1" . || true; } | xargs -r -n1 dirname | sort -u
}

# named runs the tests of one name wherever they are. A part without a test
# would be a promise that nobody keeps, so it fails.
named() {
  local dirs
  mapfile -t dirs < <(with "$1")
  if [[ ${#dirs[@]} -eq 0 ]]; then die "no test is named $1..."; fi
  go test -count=1 -timeout 15m "${@:2}" -run "^$1" "${dirs[@]}"
}

# short is what a part adds to go test when tools are missing.
short() { if [[ ${#LEFT_OUT[@]} -ne 0 ]]; then echo -short; fi; }

# large tells the test of a cube over 4 GiB to run, where the disk has room.
large() {
  local free
  free=$(df -Pk "${TMPDIR:-/tmp}" | awk 'NR == 2 { print $4 }')
  if [[ $free -gt 10000000 ]]; then
    export UNSHEARD_LARGE=1
  else
    say "unit: left out is the cube over 4 GiB, ${TMPDIR:-/tmp} has only $((free / 1000)) MB"
  fi
}

part_unit() {
  large
  # shellcheck disable=SC2046 # no word, or one
  go test -timeout 15m $(short) -skip '^Test(Fault|EndToEnd|Browser)' ./...
}

part_fault() { # shellcheck disable=SC2046
  named TestFault $(short)
}

part_e2e() { # shellcheck disable=SC2046
  named TestEndToEnd $(short)
}

part_browser() {
  if [[ ${#LEFT_OUT[@]} -ne 0 ]]; then return; fi
  named TestBrowser
}

part_race() {
  if [[ ${#LEFT_OUT[@]} -ne 0 ]]; then return; fi
  CGO_ENABLED=1 go test -race -short -timeout 20m ./queue/... ./daemon/... ./export/... ./pipeline/solve/...
}

part_fuzz() {
  local dirs dir name names
  mapfile -t dirs < <(with Fuzz)
  if [[ ${#dirs[@]} -eq 0 ]]; then die "no fuzz target"; fi
  for dir in "${dirs[@]}"; do
    names=$(go test -list '^Fuzz' "$dir")
    while read -r name; do
      if [[ $name != Fuzz* ]]; then continue; fi
      say "fuzz $dir $name for $FUZZTIME"
      go test -run '^$' -fuzz "^$name\$" -fuzztime "$FUZZTIME" -fuzzminimizetime 1x -timeout 10m "$dir" </dev/null
    done <<<"$names"
  done
}

part_bench() {
  local dirs
  mapfile -t dirs < <(with Benchmark)
  if [[ ${#dirs[@]} -eq 0 ]]; then die "no benchmark"; fi
  go test -run '^$' -bench . -benchtime 1x -timeout 15m "${dirs[@]}"
}

part_quality() {
  if [[ ${#LEFT_OUT[@]} -ne 0 ]]; then return; fi
  UNSHEARD_SCOREBOARD=${QUALITY:-1} go test -count=1 -timeout 3h -v -run '^TestScoreboard$' ./pipeline
}

part_lint() {
  local bad
  bad=$(gofmt -l .)
  if [[ -n $bad ]]; then die "not formatted by gofmt: $bad"; fi
  bad=$(roots | grep -vxE '\..*|config|daemon|deploy|export|pipeline|queue|go\.(mod|sum)|(README|DEVELOPERS)\.md|LICENSE' || true)
  if [[ -n $bad ]]; then die "does not belong at the root: $bad"; fi
  go mod verify
  go mod tidy -diff || die "go.mod and go.sum are not tidy"
  if there shellcheck; then shellcheck deploy/*.sh .ci/run; fi
  # The tool runs here whatever it looks at, so it is built before GOOS is set.
  GOBIN=$SCRATCH go install "$STATICCHECK"
  for os in linux windows; do
    say "vet and staticcheck for $os"
    GOOS=$os go vet ./...
    # Default checks. U1000 (unused) counts on Linux only: what is used on one
    # system alone would be reported on the other.
    local checks=inherit
    if [[ $os != linux ]]; then checks=inherit,-U1000; fi
    GOOS=$os "$SCRATCH/staticcheck" -checks "$checks" ./...
  done
}

# roots prints what lies at the root and is not ignored by git.
roots() {
  if git rev-parse --git-dir >/dev/null 2>&1; then
    git ls-files --cached --others --exclude-standard | cut -d/ -f1 | sort -u
  else
    ls -A
  fi
}

part_build() {
  local target
  for target in linux/amd64 linux/arm64 windows/amd64; do
    say "build $target"
    GOOS=${target%/*} GOARCH=${target#*/} go build ./...
    GOOS=${target%/*} GOARCH=${target#*/} go build -trimpath -o "$SCRATCH/" ./daemon/cmd/unsheard
  done
}

# --- one part, or several --------------------------------------------------

one() {
  local part=$1 begin=$SECONDS
  prepare "$part"
  say "$part"
  if [[ ${#LEFT_OUT[@]} -ne 0 ]]; then
    say "$part: this is not Debian, left out is what needs ${LEFT_OUT[*]}"
  fi
  "part_$part"
  say "$part done in $((SECONDS - begin)) s"
}

# several runs every part in a shell of its own, so that a part stops at its
# first error and the others run all the same.
several() {
  local part failed=()
  for part in "$@"; do
    bash deploy/test.sh "$part" || failed+=("$part")
  done
  if [[ ${#failed[@]} -ne 0 ]]; then die "FAILED: ${failed[*]} (of $*), $SECONDS s in all"; fi
  say "all good: $*, $SECONDS s in all"
}

if [[ $# -eq 0 || $* == all ]]; then
  several "${PARTS[@]}"
  exit
fi
for arg in "$@"; do
  known=" ${PARTS[*]} ${ASKED[*]} "
  if [[ $known != *" $arg "* ]]; then die "no part $arg; the parts are ${PARTS[*]} all, and ${ASKED[*]}"; fi
done
if [[ $# -eq 1 ]]; then one "$1"; else several "$@"; fi
