# Sourced by examples/demo.sh and tests/run.sh: `need PACKAGE...` installs the Debian packages that are
# missing, and does nothing (not even ask the package list) when none is.
need() {
    missing=
    for package in "$@"; do
        case $(dpkg-query -W -f '${db:Status-Status}' "$package" 2>/dev/null) in
        installed) ;;
        *) missing="$missing $package" ;;
        esac
    done
    [ -n "$missing" ] || return 0
    echo "Installing:$missing"
    if [ "$(id -u)" = 0 ]; then
        as_root=
    elif command -v sudo >/dev/null 2>&1; then
        as_root=sudo
    else
        echo "Please install these packages as root:$missing" >&2
        return 1
    fi
    # shellcheck disable=SC2086
    $as_root apt-get update -qq &&
        $as_root env DEBIAN_FRONTEND=noninteractive apt-get install -y -qq --no-install-recommends $missing \
            >/dev/null || {
        echo "Could not install:$missing" >&2
        return 1
    }
}

build_packages="make gcc libc6-dev pkg-config libnlopt-dev liblapack-dev libopenblas-dev libyaml-dev libcjson-dev"
test_packages="check libslicot-dev gfortran python3 python3-scipy clang libclang-rt-14-dev clang-format valgrind binutils git g++"
