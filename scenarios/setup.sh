# Set-up for scenarios/run and tests/run, which source this file.  POSIX sh.
#
# The caller sets `root`, the project's folder as an absolute path, and calls
#
#     prepare library            what the program needs
#     prepare library program    and the ngspice program, which the tests compare with
#
# Afterwards `$venv` is an environment of the project's own with exactly the packages of
# requirements.lock and the project itself.  Where everything is there this takes a quarter of
# a second.  One lock file and one environment serve both callers: the development tools cost
# ten seconds once, and a second lock would have to be kept in step for ever.
#
# What makes it safe to kill, to repeat and to run twice at once:
# - `$venv/unfinished` exists while packages are being changed; an environment left with it is
#   built anew.
# - `$venv/stamp` is written last and names what was installed and where, so a changed lock
#   file or a moved tree is noticed.
# - The kernel holds the lock on .setup.lock and drops it when the last process that has the
#   file open ends, so that there are no stale locks.
#
# Exit codes: 3 the simulator is missing (as the program's own), 69 anything else is.

say() { printf 'set-up: %s\n' "$*" >&2; }

fail() {
    code=$1
    shift
    say "$@"
    exit "$code"
}

# The end of the log, indented, for a message that the caller prints next.
show_log() {
    grep -v -e '^Ignoring ' -e '^ *$' "$log" | tail -n 8 | sed 's/^/    /' >&2
}

prepare() {
    venv=$root/.venv
    python=$venv/bin/python
    log=$root/.setup.log
    # Nothing of the caller's Python may leak in.  pip's other settings (index, proxy,
    # certificates) are the user's and stay as they are.
    unset PYTHONPATH PYTHONHOME PYTHONSAFEPATH PYTHONDONTWRITEBYTECODE
    unset PIP_TARGET PIP_PREFIX PIP_ROOT
    export PYTHONNOUSERSITE=1 PIP_USER=0 PIP_DISABLE_PIP_VERSION_CHECK=1

    name_homebrew_library
    if environment_is_ready && [ -z "$(missing "$python" "$@")" ]; then
        return
    fi
    find_python
    [ -w "$root" ] || fail 69 "cannot write to $root; copy the project to a folder of your own"
    exec 9>"$root/.setup.lock"
    take_lock
    : >"$log"
    if environment_is_ready; then
        install_system_packages $(missing "$base" "$@")
    else
        install_system_packages $(missing "$base" "$@" venv)
        install_python_packages
    fi
    rm -f "$log"
    exec 9>&-
}

# ---------------------------------------------------------------- what is there already

# What the environment was made from, and where.
wanted_stamp() {
    cat "$root/requirements.lock" "$root/pyproject.toml" | cksum
    printf '%s\n' "$root"
}

environment_is_ready() {
    [ -x "$python" ] && [ ! -e "$venv/unfinished" ] && [ -r "$venv/stamp" ] &&
        [ "$(cat "$venv/stamp")" = "$(wanted_stamp)" ] &&
        "$python" -I -c 'import synth, netlist' 2>/dev/null
}

# missing PYTHON NEED...: those needs (venv, library, program) that are not met, as words.
missing() {
    with=$1
    shift
    for need in "$@"; do
        case $need in
            venv) has_venv "$with" || echo venv ;;
            library) has_library "$with" || echo library ;;
            program) command -v ngspice >/dev/null || echo program ;;
        esac
    done
}

has_venv() {
    "$1" -I -c 'import ensurepip, venv' 2>/dev/null
}

# The program looks for the library in the same two ways.
has_library() {
    "$1" -I -c '
import ctypes.util, os, sys
named = os.environ.get("NGSPICE_LIBRARY_PATH", "")
sys.exit(0 if os.path.exists(named) or ctypes.util.find_library("ngspice") else 1)'
}

# Other Pythons than Homebrew's do not look into its folders.
name_homebrew_library() {
    [ -z "${NGSPICE_LIBRARY_PATH-}" ] || return 0
    for file in /opt/homebrew/lib/libngspice.dylib /usr/local/lib/libngspice.dylib; do
        [ ! -e "$file" ] || export NGSPICE_LIBRARY_PATH="$file"
    done
}

# Sets `base` to a Python of at least 3.11 that lies outside the environment.
find_python() {
    seen=
    for name in python3 python3.11 python3.12 python3.13; do
        found=$("$name" -I -c '
import sys
print(sys.version.split()[0])
print(sys._base_executable if sys.version_info >= (3, 11) else "")' 2>/dev/null) || continue
        base=$(printf '%s\n' "$found" | sed -n 2p)
        [ -z "$base" ] || return 0
        seen="$seen $name is $(printf '%s\n' "$found" | sed -n 1p);"
    done
    fail 69 "Python 3.11 or newer is needed;${seen:- no python3 was found;}" \
        "install it (Debian 12, Ubuntu 24.04 and later: apt-get install python3) and run this again"
}

# Waits for another set-up of this tree; the lock lasts as long as file descriptor 9.
take_lock() {
    "$base" -I -c '
import fcntl, sys
try:
    fcntl.flock(0, fcntl.LOCK_EX | fcntl.LOCK_NB)
except BlockingIOError:
    print("set-up: another set-up of this folder is under way; waiting", file=sys.stderr)
    fcntl.flock(0, fcntl.LOCK_EX)' <&9 || fail 69 "interrupted"
}

# ---------------------------------------------------------------- the system's packages

# install_system_packages NEED...: through whichever package manager there is.
install_system_packages() {
    [ $# -gt 0 ] || return 0
    needs=$*
    for manager in apt-get dnf zypper pacman brew ''; do
        [ -z "$manager" ] || ! command -v "$manager" >/dev/null || break
    done
    packages=
    for need in $needs; do
        [ -z "$manager" ] || packages="$packages $(package_for "$manager" "$need")"
    done
    packages=$(printf '%s' "$packages" | sed 's/  */ /g; s/^ //; s/ $//')
    if [ -z "$packages" ]; then
        :
    elif [ "$manager" != brew ] && [ "$(id -u)" -ne 0 ] && ! command -v sudo >/dev/null; then
        say "$packages: installing them needs an administrator, and there is no sudo here"
    else
        say "installing $packages with $manager"
        # Word splitting is wanted: the names hold no spaces.
        run_manager "$manager" $packages 9>&- >>"$log" 2>&1 || true
    fi
    name_homebrew_library
    still=$(missing "$base" $needs)
    [ -z "$still" ] || explain_missing $still
}

# package_for MANAGER NEED.  Only the names for apt-get (Debian 12) have been tried; those of
# the others are from memory.
package_for() {
    case $1:$2 in
        apt-get:venv) "$base" -I -c '
import sys
print("python%d.%d-venv" % sys.version_info[:2])' ;;
        apt-get:library | zypper:library) printf 'libngspice0' ;;
        dnf:library | brew:library) printf 'libngspice' ;;
        pacman:library | *:program) printf 'ngspice' ;;
    esac
}

run_manager() {
    manager=$1
    shift
    case $manager in
        apt-get)
            # Fresh lists only where the ones there do not serve; `update` may complain about
            # a source that has nothing to do with us.
            apt_install "$@" || { as_root apt-get -q update; apt_install "$@"; }
            ;;
        dnf) as_root dnf -q -y install "$@" ;;
        zypper) as_root zypper -n install "$@" ;;
        pacman) as_root pacman -S --noconfirm --needed "$@" ;;
        brew) brew install "$@" ;;
    esac
}

apt_install() {
    as_root env DEBIAN_FRONTEND=noninteractive \
        apt-get -q -y -o DPkg::Lock::Timeout=300 install --no-install-recommends "$@"
}

as_root() {
    if [ "$(id -u)" -eq 0 ]; then
        "$@"
    elif [ -t 0 ]; then
        # Somebody is there to type a password.
        sudo "$@"
    else
        sudo -n "$@"
    fi
}

# explain_missing NEED...: says what to install by hand.  The simulator's library alone does
# not stop `prepare library`: the program then writes its pack unverified and returns 3.
explain_missing() {
    show_log
    if [ -z "$manager" ]; then
        say "found no package manager that this script knows (apt-get, dnf, zypper, pacman, brew)"
    elif [ -n "$packages" ]; then
        say "$manager did not install $packages; try it as an administrator, with a network"
    fi
    for need in "$@"; do
        case $need in
            library)
                say "the ngspice library (libngspice) is missing; install it, or" \
                    "name its file in NGSPICE_LIBRARY_PATH"
                ;;
            program) say "the ngspice program is missing, which the tests compare with; install it" ;;
            venv)
                "$base" -I -c 'import virtualenv' 2>/dev/null && continue
                fail 69 "$base cannot make a private environment: its modules venv and ensurepip" \
                    "are missing, and so is virtualenv"
                ;;
        esac
    done
    case " $needs " in
        *" program "*) fail 3 "the tests need the simulator" ;;
    esac
    case " $* " in
        *" library "*) say "going on without the simulator: nothing will be verified" ;;
    esac
}

# ---------------------------------------------------------------- Python packages

# The environment is usable when it was finished once, was made at this place, and runs.
environment_is_usable() {
    [ ! -e "$venv/unfinished" ] && [ -r "$venv/bin/pip" ] &&
        grep -qF "$python" "$venv/bin/pip" &&
        "$python" -I -c 'import pip, sys; sys.exit(sys.version_info < (3, 11))' 2>/dev/null
}

install_python_packages() {
    if environment_is_usable; then
        say "bringing the private environment .venv up to date"
        : >"$venv/unfinished"
    else
        say "making a private environment in .venv with $base"
        rm -rf "$venv"
        mkdir "$venv"
        : >"$venv/unfinished"
        make_environment >>"$log" 2>&1 || {
            show_log
            fail 69 "the private environment could not be made"
        }
        say "installing the packages of requirements.lock; about half a minute, 0.6 GB on disk"
    fi
    rm -f "$venv/stamp"
    pip_install >>"$log" 2>&1 || {
        # pip undoes what it could not finish.
        rm -f "$venv/unfinished"
        show_log
        fail 69 "pip could not install the packages: is there a network, or a proxy or index" \
            "to set in pip's configuration?  Everything it said is in $log"
    }
    wanted_stamp >"$venv/stamp"
    rm -f "$venv/unfinished"
}

make_environment() {
    if has_venv "$base"; then
        "$base" -I -m venv "$venv"
    else
        "$base" -I -m virtualenv --quiet "$venv"
    fi
}

# The build tool is in the lock file, so that the project's own build fetches nothing.
pip_install() {
    "$python" -I -m pip install --progress-bar off --require-hashes -r "$root/requirements.lock" &&
        (cd "$root" && "$python" -I -m pip install --progress-bar off \
            --no-deps --no-build-isolation -e .)
}
