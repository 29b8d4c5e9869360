#!/bin/sh
# Makes the reference vectors of the unit tests with SciPy and compares them with what is kept.
# `make.sh --write` keeps the new ones instead.
set -eu
cd "$(dirname "$0")"
python=/usr/bin/python3 # Debian's, which has python3-scipy
case ${1:-} in
--write) "$python" make_ocv.py ocv_vectors.h ;;
*) "$python" make_ocv.py --check ocv_vectors.h ;;
esac
