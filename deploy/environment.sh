# Sourced by the scripts that need a Python environment: finds an interpreter, installs Debian's missing packages, makes
# the environment from pinned versions, and remakes it when one of the files that it depends on has changed.
# Expects the current folder to be the root of the checkout, and `set -euo pipefail`.

# Debian's python3 comes without ensurepip, and so without virtual environments.
packages=(python3-venv)

# A node runs one BLAS thread; more of them would also make timings depend on the number of cores.
export OPENBLAS_NUM_THREADS=1 OMP_NUM_THREADS=1
# Older pip hands the first to isolated builds, newer pip only the second. The path is relative because pip splits
# the value at blanks, and the path of the checkout may hold some.
export PIP_CONSTRAINT=tests/constraints.txt PIP_BUILD_CONSTRAINT=tests/constraints.txt
export PIP_DISABLE_PIP_VERSION_CHECK=1 PIP_NO_INPUT=1

name=$0
log=$(mktemp)
trap 'rm -f "$log"' EXIT

stop() {
    printf '%s: %s\n' "$name" "$2" >&2
    exit "$1"
}

# One line a step; what the command printed is shown only where it failed.
step() {
    local what=$1 began=$SECONDS
    shift
    printf '%s ... ' "$what"
    if "$@" >"$log" 2>&1 </dev/null; then
        printf 'ok, %d s\n' "$((SECONDS - began))"
    else
        printf 'failed\n'
        cat "$log"
        stop 1 "this step failed: $what"
    fi
}

usable() {
    "$1" -c 'import sys; sys.exit(sys.version_info < (3, 11) or sys.maxsize < 2**32)' 2>/dev/null
}

# Sets `python`.
find_python() {
    local candidates=(python3.13 python3.12 python3.11 python3) candidate
    [[ -z ${PYTHON:-} ]] || candidates=("$PYTHON")
    for candidate in "${candidates[@]}"; do
        if usable "$candidate"; then
            python=$candidate
            return
        fi
    done
    stop 2 "no 64-bit Python 3.11 or newer among: ${candidates[*]}
(install python3, or name one: PYTHON=/path/to/python3 $name)"
}

install_packages() {
    local missing=() package status
    for package in "${packages[@]}"; do
        # A Python that is not Debian's has its own ensurepip.
        if [[ $package == python3-venv ]] && "$python" -c 'import ensurepip' 2>/dev/null; then
            continue
        fi
        status=$(dpkg-query -W -f '${db:Status-Status}' "$package" 2>/dev/null || true)
        [[ $status == installed ]] || missing+=("$package")
    done
    ((${#missing[@]})) || return 0
    ((EUID == 0)) || stop 2 "Debian packages are missing; install them, then start again:
sudo apt-get update && sudo apt-get install --no-install-recommends ${missing[*]}"
    export DEBIAN_FRONTEND=noninteractive
    step "apt-get update" apt-get update
    # A machine set up a moment ago is often still at its own upgrades, which hold the lock.
    step "apt-get install ${missing[*]}" \
        apt-get install -y --no-install-recommends -o DPkg::Lock::Timeout=300 "${missing[@]}"
}

unpinned() {
    local installed
    # Before Python 3.12 ensurepip brings a setuptools along that nothing here uses.
    installed=$("$1/bin/python" -m pip freeze --all --exclude setuptools --exclude humbell)
    ! grep -vixFf tests/constraints.txt <<<"$installed"
}

# make_environment FOLDER REQUIREMENT
make_environment() {
    local folder=$1 stamp
    find_python
    install_packages
    # A virtual environment holds absolute paths, so that one that was moved is as stale as one with other versions.
    stamp=$({
        "$python" -c 'import sys; print(sys.version, sys.base_prefix)'
        pwd -P
        cat pyproject.toml tests/constraints.txt deploy/environment.sh
    } | sha256sum)
    if [[ $(cat "$folder/stamp" 2>/dev/null) != "$stamp" ]]; then
        step "creating $folder" "$python" -m venv --clear "$folder"
        step "installing the pinned pip" "$folder/bin/python" -m pip install --upgrade pip
        # Wheels only: a source build would want a compiler, and take an hour on a small computer.
        step "installing $2" \
            "$folder/bin/python" -m pip install --only-binary :all: -c tests/constraints.txt --editable "$2"
        step "looking for packages that tests/constraints.txt does not pin" unpinned "$folder"
        echo "$stamp" >"$folder/stamp"
    fi
    export PATH="$PWD/$folder/bin:$PATH"
}
