# Shared by the scripts beside it: makes a virtual environment with trajcage in it.

# make_environment DIRECTORY [pip options]: sets $bin to its directory of programs.
make_environment() {
    directory=$1
    shift
    python=${PYTHON:-python3}
    if ! "$python" -c 'import sys; sys.exit(sys.version_info < (3, 11))' 2>/dev/null; then
        echo "expected Python 3.11 or later as '$python'; set PYTHON to one" >&2
        exit 1
    fi
    bin=$PWD/$directory/bin
    [ -x "$bin/python" ] || "$python" -m venv "$directory"
    # dependency groups need pip 25.1
    "$bin/python" -m pip install -qq --disable-pip-version-check --upgrade 'pip>=25.1'
    "$bin/python" -m pip install -qq --disable-pip-version-check --editable . "$@"
}
