#!/usr/bin/env bash
# Set up .venv on Debian 12: system packages, pinned packages from PyPI, this package (editable).
# Usage: .ci/setup.sh [run|dev]    run: what `lattice` needs; dev: the tests and linters as well
set -euo pipefail

tier="${1:-dev}"
python=/usr/bin/python3
system_packages=(
    python3-venv python3-numpy python3-mpi4py python3-mpi4py-fft python3-petsc4py python3-slepc4py
    python3-h5py python3-h5py-mpi openmpi-bin
    libopenblas0-pthread  # MUMPS spends its time in BLAS; the reference BLAS is several times slower
)
# The tests of batch submission start a Slurm of their own on the loopback interface, which only root can.
scheduler_packages=(slurmctld slurmd slurm-client munge)
builders=(pip setuptools wheel)

cd "$(dirname "$0")/.."
root="$(pwd -P)"

say() { printf 'setup: %s\n' "$*"; }
fail() { printf 'setup: %s\n' "$@" >&2; exit 1; }

is_installed() { [ "$(dpkg-query -W -f='${db:Status-Status}' "$1" 2>/dev/null)" = installed ]; }

as_root() {
    if [ "$(id -u)" = 0 ]; then "$@"; else sudo -n "$@"; fi
}

install_system_packages() {
    if ! command -v dpkg-query >/dev/null || ! command -v apt-get >/dev/null; then
        fail "this is not a Debian system; install Python 3.11 or newer, an MPI, PETSc and SLEPc with their" \
            "Python bindings, mpi4py and a parallel h5py, then 'pip install .' (README, On a cluster)"
    fi
    local missing=() package wanted=("${system_packages[@]}")
    if [ "$tier" = dev ] && [ "$(id -u)" = 0 ]; then wanted+=("${scheduler_packages[@]}"); fi
    for package in "${wanted[@]}"; do
        is_installed "$package" || missing+=("$package")
    done
    [ "${#missing[@]}" -gt 0 ] || return 0
    if [ "$(id -u)" != 0 ] && ! sudo -n true 2>/dev/null; then
        fail "these Debian packages are missing and need an administrator:" \
            "    sudo apt-get install --no-install-recommends ${missing[*]}" \
            "run this, then make again"
    fi
    say "installing ${missing[*]}"
    local quiet=(-qq -o Dpkg::Use-Pty=0 -o DPkg::Lock::Timeout=300)
    as_root apt-get "${quiet[@]}" update
    as_root env DEBIAN_FRONTEND=noninteractive \
        apt-get "${quiet[@]}" install -y --no-install-recommends "${missing[@]}" >/dev/null || fail \
        "apt-get could not install ${missing[*]}; this setup is made for Debian 12 (README, On a cluster," \
        "tells how to install against another system's MPI and PETSc)"
}

venv_is_usable() {
    grep -qx 'include-system-site-packages = true' .venv/pyvenv.cfg 2>/dev/null &&
        [ "$("$root/.venv/bin/python" -c 'import sys; print(sys.prefix)' 2>/dev/null)" = "$root/.venv" ]
}

make_venv() {
    venv_is_usable || "$python" -m venv --clear --system-site-packages .venv
    # Packages of the user's own home must not stand before Debian's numpy and petsc4py.
    local site
    site="$(.venv/bin/python -c 'import sysconfig; print(sysconfig.get_path("purelib"))')"
    echo 'import site; site.ENABLE_USER_SITE = False' >"$site/no_user_site.pth"
}

install_python_packages() {
    local project=.
    [ "$tier" = run ] || project=".[$tier]"
    local pip=(.venv/bin/python -m pip install --quiet --disable-pip-version-check --no-input)
    "${pip[@]}" --constraint constraints.txt "${builders[@]}"
    "${pip[@]}" --constraint constraints.txt --no-build-isolation \
        --config-settings editable_mode=compat --editable "$project"
}

# What is built against Debian's MPI must come from Debian, whatever pip has resolved.
check_origin() {
    .venv/bin/python - <<'END'
import importlib
import os

from lattice import environment

environment.prepare()
os.environ["H5PY_ALWAYS_USE_MPI"] = "1"
for name in ("numpy", "mpi4py.MPI", "mpi4py_fft", "petsc4py", "slepc4py", "h5py"):
    module = importlib.import_module(name)
    if not module.__file__.startswith("/usr/lib/"):
        raise SystemExit(f"setup: {name} must come from Debian, got {module.__file__}; remove .venv, make again")
if not importlib.import_module("h5py").get_config().mpi:
    raise SystemExit("setup: Debian's h5py was loaded without MPI; install python3-h5py-mpi")
END
}

[ "$tier" = run ] || [ "$tier" = dev ] || fail "usage: .ci/setup.sh [run|dev], got '$tier'"
fingerprint="$({ cat .ci/setup.sh pyproject.toml constraints.txt; echo "$root"; "$python" -V || true; } 2>&1 | sha256sum)"
for done_tier in dev "$tier"; do
    if [ "$(cat ".venv/ready-$done_tier" 2>/dev/null)" = "$fingerprint" ]; then exit 0; fi
done
started="$(date +%s)"
install_system_packages
[ -x "$python" ] || fail "$python not found; install python3"
make_venv
rm -f .venv/ready-*
say "installing Python packages into .venv"
install_python_packages
check_origin
echo "$fingerprint" >".venv/ready-$tier"
say "ready after $(($(date +%s) - started)) s: .venv/bin/lattice"
