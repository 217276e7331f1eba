#!/bin/sh
# Runs every test: Rust's own, and those against SciPy, tifffile, OpenCV, scikit-image and matplotlib, which are installed into
# target/peers first. Needs Rust, a C compiler and Python 3.
set -eu
cd "$(dirname "$0")/.."
peers=target/peers
if [ ! -x "$peers/bin/python" ] || ! "$peers/bin/python" -c 'import scipy, tifffile, imagecodecs, skimage, matplotlib, cv2, astropy' 2>/dev/null; then
    mkdir -p target
    rm -rf "$peers"
    python3 -m venv "$peers" || {
        echo "error: python3 -m venv failed; on Debian install the package python3-venv" >&2
        exit 1
    }
    "$peers/bin/python" -m pip install --quiet --disable-pip-version-check -r tests/peers/requirements.txt
fi
# The report pages are looked at in headless Chromium.
if ! command -v chromium >/dev/null && ! command -v chromium-browser >/dev/null && ! command -v google-chrome >/dev/null; then
    if [ "$(id -u)" = 0 ] && command -v apt-get >/dev/null; then
        apt-get update -qq
        apt-get install -y -qq chromium >/dev/null
    else
        echo "error: the tests of the report pages need Chromium; on Debian: sudo apt-get install chromium" >&2
        exit 1
    fi
fi
REGAUGE_PYTHON="$PWD/$peers/bin/python"
export REGAUGE_PYTHON
exec cargo test --quiet "$@"
