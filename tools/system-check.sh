#!/usr/bin/env bash
# Finds what the build needs from the system; installs it with apt-get when root.
set -euo pipefail

missing=()
command -v cc >/dev/null || missing+=(gcc)
command -v pkg-config >/dev/null || missing+=(pkg-config)
pkg-config --exists openblas 2>/dev/null || missing+=(libopenblas-dev)

if [ ${#missing[@]} -gt 0 ]; then
    if [ "$(id -u)" -eq 0 ] && command -v apt-get >/dev/null; then
        echo "Installing with apt-get: ${missing[*]}"
        apt-get update -qq >/dev/null
        DEBIAN_FRONTEND=noninteractive apt-get install -y -qq "${missing[@]}" >/dev/null
    else
        echo "The build needs: ${missing[*]}" >&2
        echo "On Debian and its relatives: sudo apt-get install ${missing[*]}" >&2
        exit 1
    fi
fi

command -v cargo >/dev/null || {
    echo "The build needs Rust 1.88 or newer (cargo was not found)." >&2
    exit 1
}
"${PYTHON:-python3}" -c 'import sys, venv; sys.exit(sys.version_info < (3, 11))' || {
    echo "Python 3.11 or newer with its venv module is needed; say which one with PYTHON=..." >&2
    exit 1
}
