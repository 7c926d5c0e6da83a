# Sourced by bin/demo, bin/test and .ci/run: brings the machine and .venv to what loopdoc needs.
#
# prepare_environment   installs what is missing and makes .venv; quick when all is there.
# can_make_pdf          succeeds where WeasyPrint finds the libraries that it needs.
#
# .venv/loopdoc-stamp says what .venv holds: "unfinished" while it is being made, so that an interrupted
# set-up is made anew, then a hash of everything that it was made from.

root=$(CDPATH='' cd -- "$(dirname -- "${BASH_SOURCE[0]}")/.." && pwd -P)
environment=$root/.venv
stamp=$environment/loopdoc-stamp
python=$environment/bin/python

# Packages of another Python, handed down by the caller's shell, must not stand in for the pinned ones.
unset PYTHONHOME PYTHONPATH

say() { printf '==> %s\n' "$*" >&2; }

stop() {
    printf 'Stopped: %s\n' "$*" >&2
    exit 2
}

# Runs a command in silence; when it fails, shows the end of what it said.
quietly() {
    local output
    if ! output=$("$@" 2>&1 </dev/null); then
        tail -n 30 <<<"$output" >&2
        return 1
    fi
}

python_is_new_enough() {
    "$1" -c 'import sys; sys.exit(sys.version_info < tuple(map(int, sys.argv[1].split("."))))' "$2" 2>/dev/null
}

# The least Python version, from pyproject.toml.
least_python() { sed -n 's/^requires-python = ">=\(.*\)"$/\1/p' "$root/pyproject.toml"; }

find_python() {
    local name
    for name in python3 python3.14 python3.13 python3.12 python3.11; do
        if python_is_new_enough "$name" "$1"; then
            printf '%s\n' "$name"
            return
        fi
    done
    return 1
}

# Why each Debian package is wanted.
purpose() {
    case $1 in
        *-venv) echo "makes the Python environment in .venv" ;;
        libpango-1.0-0) echo "lays out the text of the PDF documents" ;;
        libpangoft2-1.0-0) echo "finds and shapes the fonts of the PDF documents" ;;
        libharfbuzz-subset0) echo "cuts fonts to what a PDF uses: half the time, and the same bytes on every run" ;;
    esac
}

# Prints the Debian package of each shared library that does not load in the Python given.
missing_libraries() {
    "$1" - <<'PYTHON'
import ctypes

for library, package in (
    ("libpango-1.0", "libpango-1.0-0"),
    ("libpangoft2-1.0", "libpangoft2-1.0-0"),
    ("libharfbuzz-subset", "libharfbuzz-subset0"),
):
    for name in (f"{library}.so.0", f"{library}.0.dylib"):
        try:
            ctypes.CDLL(name)
            break
        except OSError:
            pass
    else:
        print(package)
PYTHON
}

can_make_pdf() { ! missing_libraries "$python" | grep -q pango; }

# Installs Debian packages, or says what to type and fails.
install_packages() {
    local package
    say "Missing on this machine:"
    for package in "$@"; do
        printf '      %-20s %s\n' "$package" "$(purpose "$package")" >&2
    done

    local -a as_root=()
    local because=""
    if ! command -v apt-get >/dev/null; then
        because="this system has no apt-get; the names above are Debian's, other systems name them alike"
    elif [ "$(id -u)" -ne 0 ]; then
        as_root=(sudo -n)
        "${as_root[@]}" true 2>/dev/null || because="you are not root, and sudo is not there or wants a password"
    fi
    if [ -z "$because" ]; then
        # dpkg refuses to work without the sbin folders, which an empty environment may lack.
        local -a apt=(env "PATH=$PATH:/usr/local/sbin:/usr/sbin:/sbin" DEBIAN_FRONTEND=noninteractive
            apt-get -qq -o DPkg::Lock::Timeout=120)
        say "Installing with apt-get: $*"
        # An update that fails leaves the lists that are there, and they may do.
        quietly ${as_root[@]+"${as_root[@]}"} "${apt[@]}" update || true
        quietly ${as_root[@]+"${as_root[@]}"} "${apt[@]}" install --yes --no-install-recommends "$@" && return
        because="apt-get failed, in its own words above"
    fi
    say "Not installed: $because. As root, type:"
    printf '\n      apt-get update && apt-get install --yes --no-install-recommends %s\n\n' "$*" >&2
    return 1
}

# A hash of all that .venv is made from: pins, project, Python and place.
current_stamp() {
    "$python" - "$root" <<'PYTHON'
import hashlib
import pathlib
import sys

root = pathlib.Path(sys.argv[1])
digest = hashlib.sha256(f"{root}\n{sys.version}\n".encode())
for name in ("requirements.txt", "pyproject.toml"):
    digest.update(root.joinpath(name).read_bytes())
print(digest.hexdigest())
PYTHON
}

environment_is_ready() {
    [ -f "$stamp" ] && [ -x "$python" ] && [ "$(cat "$stamp")" = "$(current_stamp 2>/dev/null)" ]
}

# A .venv made by hand, or for other pins, is brought up to date in place.
environment_can_be_updated() {
    [ "$(cat "$stamp" 2>/dev/null)" != unfinished ] && python_is_new_enough "$python" "$1" \
        && "$python" -m pip --version >/dev/null 2>&1
}

# Makes .venv by the Python given, or brings it up to date where that Python is its own.
make_environment() {
    local base=$1
    if [ "$base" != "$python" ]; then
        if [ -e "$environment" ]; then
            say "What stands in .venv is unfinished or does not work: removing it."
            rm -rf -- "$environment"
        fi
        say "Making a Python environment in .venv, so that nothing else on this machine is touched."
    fi
    mkdir -p -- "$environment" || stop "cannot write in $root."
    echo unfinished >"$stamp"
    [ "$base" = "$python" ] || quietly "$base" -m venv "$environment" \
        || stop "$base -m venv failed, in its own words above."
    say "Installing $(grep -c '==' "$root/requirements.txt") pinned Python packages (a minute or two the first time)."
    quietly "$python" -m pip install --requirement "$root/requirements.txt" \
        || stop "pip could not install the packages of requirements.txt, in its own words above."
    say "Installing loopdoc itself, as a link to this folder."
    quietly "$python" -m pip install --no-deps --no-build-isolation --editable "$root" \
        || stop "pip could not install loopdoc, in its own words above."
    current_stamp >"$stamp"
}

prepare_environment() {
    # Two set-ups in one folder would tread on each other; this file is the lock.
    exec 9<"${BASH_SOURCE[0]}"
    if command -v flock >/dev/null && ! flock --nonblock 9; then
        say "Another set-up is at work in this folder: waiting for it."
        flock 9
    fi

    local ready=yes base=$python least
    local -a missing=()
    if ! environment_is_ready; then
        ready=no
        least=$(least_python)
        if ! environment_can_be_updated "$least"; then
            base=$(find_python "$least") \
                || stop "loopdoc needs Python $least or newer; this machine has $(python3 --version 2>&1 || true)." \
                    "On Debian 12 or newer, as root, type: apt-get update && apt-get install --yes python3"
            # Debian keeps apart what the venv module needs to give an environment its pip.
            "$base" -c 'import ensurepip, venv' 2>/dev/null || missing+=("$base-venv")
        fi
    fi
    # shellcheck disable=SC2207  # package names hold no blanks
    missing+=($(missing_libraries "$base"))

    if [ ${#missing[@]} -gt 0 ] && ! install_packages "${missing[@]}"; then
        case ${missing[0]} in
            *-venv) stop "without ${missing[0]} there is no environment to run loopdoc in." ;;
        esac
    fi
    [ "$ready" = yes ] || make_environment "$base"
    exec 9<&-
}
