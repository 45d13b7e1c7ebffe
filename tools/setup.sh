#!/usr/bin/env bash
# What demo.sh, test.sh and .ci/run share: finds or installs R, a toolchain and the
# packages of DESCRIPTION, and installs lambdabar. Sourced; the working directory
# becomes the project's root.
#
# With apt and root, Debian's built packages come first and CRAN serves what is left.
# Elsewhere CRAN packages go to the user's library, and a missing program is named.

root=$(cd "$(dirname "${BASH_SOURCE[0]}")/.." && pwd)
cd "$root" || exit 1

scratch=$(mktemp -d)
trap 'rm -rf "$scratch"' EXIT

# Without a home directory R has no place for a user's library.
HOME=${HOME:-$(unset HOME && echo ~)}
export HOME

# Under a plain C locale R would write the package's non-ASCII output as escapes.
if [ "$(locale charmap 2>/dev/null)" != UTF-8 ] &&
  locale -a 2>/dev/null | grep -ix 'C\.utf-*8' >/dev/null; then
  export LC_ALL=C.UTF-8
fi

cores=$(getconf _NPROCESSORS_ONLN 2>/dev/null || echo 1)
# One compiler process needs about a gigabyte for Eigen's templates.
[ "$cores" -le 4 ] || cores=4
export MAKEFLAGS=${MAKEFLAGS:--j$cores}

say() { printf '%s\n' "$*"; }

fail() {
  printf '%s\n' "$*" >&2
  return 1
}

have() { command -v "$1" >/dev/null 2>&1; }

# run_logged WHAT COMMAND...: says WHAT, keeps the output, shows it only on failure.
run_logged() {
  local what=$1 log
  log=$(mktemp "$scratch/log.XXXXXX")
  shift
  say "$what"
  "$@" >"$log" 2>&1 && return 0
  tail -n 60 "$log" >&2
  fail "This failed: $what"
}

# Whatever ends a run that counts, its last line is the count.
start_counting() {
  passed=0
  failed=0
  skipped=0
  trap close_counting EXIT
}

# count PASSED FAILED [SKIPPED]
count() {
  passed=$((passed + $1))
  failed=$((failed + $2))
  skipped=$((skipped + ${3:-0}))
}

close_counting() {
  local status=$?
  [ "$status" -eq 0 ] || [ "$failed" -gt 0 ] || failed=1
  rm -rf "$scratch"
  printf '%d passed, %d failed' "$passed" "$failed"
  [ "$skipped" -eq 0 ] || printf ', %d skipped' "$skipped"
  printf '\n'
}

apt_usable() { have apt-get && have dpkg-query && [ "$(id -u)" -eq 0 ]; }

# Built r-cran packages belong to the distribution's R and to no other.
r_is_debian() { dpkg-query -S "$(readlink -f "$(command -v R)")" >/dev/null 2>&1; }

update_apt_once() {
  [ ! -e "$scratch/apt-updated" ] || return 0
  touch "$scratch/apt-updated"
  run_logged "Reading the package lists of apt." apt-get update ||
    say "Going on with the lists that are here."
}

apt_install() {
  update_apt_once
  run_logged "Installing with apt: $*" \
    env DEBIAN_FRONTEND=noninteractive apt-get install -y --no-install-recommends "$@"
}

apt_installed() {
  [ "$(dpkg-query -W -f '${db:Status-Status}' "$1" 2>/dev/null)" = installed ]
}

# ensure_programs SENTENCE DEBIAN_PACKAGE... -- PROGRAM...
# Installs the packages when one of the programs is not there.
ensure_programs() {
  local sentence=$1 program
  local packages=() absent=()
  shift
  while [ "$1" != -- ]; do
    packages+=("$1")
    shift
  done
  shift
  for program in "$@"; do
    have "$program" || absent+=("$program")
  done
  [ ${#absent[@]} -gt 0 ] || return 0
  apt_usable || fail "Not found: ${absent[*]}. $sentence" || return 1
  apt_install "${packages[@]}"
}

ensure_r() {
  ensure_programs "Install R, version 4.1 or newer, and run this again." \
    r-base-core r-base-dev -- R Rscript
}

# The package links LAPACK, BLAS and the Fortran run-time library through Eigen's glue,
# so the probe does too.
toolchain_works() {
  local probe
  probe=$(mktemp -d "$scratch/probe.XXXXXX")
  echo 'extern "C" void probe() {}' >"$probe/probe.cpp"
  # shellcheck disable=SC2016  # make expands these
  printf '%s\n' 'CXX_STD = CXX17' \
    'PKG_LIBS = $(LAPACK_LIBS) $(BLAS_LIBS) $(FLIBS)' >"$probe/Makevars"
  (cd "$probe" && R CMD SHLIB probe.cpp) >/dev/null 2>&1
}

ensure_toolchain() {
  ! toolchain_works || return 0
  if apt_usable; then
    if r_is_debian; then
      apt_install r-base-dev
    else
      apt_install g++ gfortran make liblapack-dev libblas-dev
    fi
  fi
  toolchain_works ||
    fail "R cannot build a package here: install make, a C++17 compiler and gfortran."
}

# Reads the lines of a file into the array `lines`.
read_lines() {
  local line
  lines=()
  while IFS= read -r line; do lines+=("$line"); done <"$1"
}

# find_missing FIELD...: names of packages, into the array `lines`.
find_missing() {
  Rscript tools/packages.R missing "$scratch/missing" "$@" >/dev/null || return 1
  read_lines "$scratch/missing"
}

# find_built PACKAGE...: names of apt packages that hold these, into the array `lines`.
find_built() {
  local package name
  lines=()
  for package in "$@"; do
    name=r-cran-$(printf '%s' "$package" | tr '[:upper:]' '[:lower:]')
    ! apt-cache show "$name" >/dev/null 2>&1 || lines+=("$name")
  done
}

install_built() {
  update_apt_once
  find_built "$@"
  [ ${#lines[@]} -eq 0 ] || apt_install "${lines[@]}" || say "Trying CRAN instead."
}

# ensure_packages FIELD...: the packages in these fields of DESCRIPTION.
ensure_packages() {
  local lines
  find_missing "$@" || return 1
  if [ ${#lines[@]} -gt 0 ] && apt_usable && r_is_debian; then
    install_built "${lines[@]}"
    find_missing "$@" || return 1
  fi
  [ ${#lines[@]} -gt 0 ] || return 0
  ensure_toolchain || return 1
  run_logged "Installing from CRAN: ${lines[*]}" \
    Rscript tools/packages.R install "${lines[@]}" || return 1
  find_missing "$@" || return 1
  [ ${#lines[@]} -eq 0 ] || fail "These R packages could not be installed: ${lines[*]}"
}

use_writable_library() {
  Rscript tools/packages.R library "$scratch/library" >/dev/null
  library=$(cat "$scratch/library")
  export R_LIBS=$library${R_LIBS:+:$R_LIBS}
}

# Changes with the sources and with the R that compiles them.
fingerprint() {
  {
    Rscript --version 2>&1
    find . \
      \( -name .git -o -path ./tests -o -path ./tools -o -path ./vignettes \) -prune -o \
      -type f ! -name '*.o' ! -name '*.so' ! -name '*.dll' -exec cksum {} + |
      LC_ALL=C sort
  } | cksum
}

build_and_install() (
  cd "$scratch" &&
    R CMD build --no-build-vignettes --no-manual "$root" &&
    R CMD INSTALL --library="$library" lambdabar_*.tar.gz
)

# The installed copy carries the fingerprint of its sources, so the same sources are not
# compiled twice.
install_lambdabar() {
  local wanted
  wanted=$(fingerprint)
  if [ "$(cat "$library/lambdabar/fingerprint" 2>/dev/null)" = "$wanted" ]; then
    return 0
  fi
  ensure_toolchain
  run_logged "Building and installing lambdabar." build_and_install
  printf '%s\n' "$wanted" >"$library/lambdabar/fingerprint"
}
