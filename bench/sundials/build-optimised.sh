#!/bin/sh
# Builds the parts of SUNDIALS that package sundials uses, from Debian's own
# source package, with -O3: Debian's binary package is built without
# optimisation, and a comparison against that alone would flatter islet. The
# soname is that of Debian's binary package, so a program picks one of the two
# at run time:
#
#     bench/sundials/build-optimised.sh DIR
#     LD_LIBRARY_PATH=DIR/lib go test -tags sundials ...
#
# Needs Debian's cmake, dpkg-dev and libsuitesparse-dev.
set -eu
[ $# -eq 1 ] || { echo "usage: $0 DIR" >&2; exit 2; }
mkdir -p "$1"
dir=$(cd "$1" && pwd)
[ -e "$dir/lib/libsundials_ida.so" ] && exit 0
work=$(mktemp -d)
trap 'rm -rf "$work"' EXIT
chmod 755 "$work"
cd "$work"
echo "deb-src http://deb.debian.org/debian $(. /etc/os-release; echo "$VERSION_CODENAME") main" > sources
apt="-o Dir::Etc::SourceList=$work/sources -o Dir::Etc::SourceParts=/dev/null -o Dir::State::Lists=$work/lists"
mkdir -p lists/partial
apt-get $apt -qq update
apt-get $apt -qq source sundials >&2
arch=$(gcc -dumpmachine)
libs=/usr/lib/$arch
cmake -S sundials-*/ -B build -DCMAKE_BUILD_TYPE=Release "-DCMAKE_C_FLAGS=-O3 -fcommon" \
    -DCMAKE_INSTALL_PREFIX="$dir" -DCMAKE_INSTALL_LIBDIR=lib -DSUNDIALS_INDEX_SIZE=64 \
    -DBUILD_ARKODE=OFF -DBUILD_CVODE=OFF -DBUILD_CVODES=OFF -DBUILD_IDAS=OFF -DBUILD_KINSOL=OFF \
    -DBUILD_STATIC_LIBS=OFF -DEXAMPLES_ENABLE_C=OFF -DEXAMPLES_ENABLE_CXX=OFF -DEXAMPLES_INSTALL=OFF \
    -DENABLE_KLU=ON -DKLU_INCLUDE_DIR=/usr/include/suitesparse "-DKLU_LIBRARY_DIR=$libs" -DCMAKE_LIBRARY_ARCHITECTURE="$arch" >cmake.log 2>&1 || { tail -20 cmake.log >&2; exit 1; }
cmake --build build -j"$(nproc)" --target install >make.log 2>&1 || { tail -20 make.log >&2; exit 1; }
