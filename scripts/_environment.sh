# Sourced by the commands: goes to the checkout and makes its .venv fit, with Python 3.11 or newer and pip alone.

CDPATH='' cd -- "$(dirname -- "${BASH_SOURCE[0]}")/.."
export PIP_DISABLE_PIP_VERSION_CHECK=1
python=.venv/bin/python

# new_enough PYTHON: whether there is such an interpreter, of 3.11 or newer.
new_enough() {
  "$1" -c 'import sys; sys.exit(sys.version_info < (3, 11))' 2>/dev/null
}

# find_python: print the first interpreter on the PATH that is new enough.
find_python() {
  local name
  for name in python3 python3.11 python3.12 python3.13 python3.14 python; do
    if new_enough "$name"; then
      command -v "$name"
      return
    fi
  done
  echo "bigsvd needs Python 3.11 or newer; python3 on the PATH is: $(python3 --version 2>&1 || true)" >&2
  echo "Install Python 3.11 with pip, put it on the PATH as python3.11, and run this again." >&2
  return 1
}

# environment EXTRAS: install the checkout, editable, with these extras ("" or "[test,check]"), unless that is done.
environment() {
  local extras=$1 state found
  # What was installed fits this pyproject.toml, in this place: a moved checkout has wrong paths in .venv/bin.
  state="$(cksum < pyproject.toml) $PWD"
  if [ -x .venv/bin/bigsvd ] && new_enough "$python" &&
    grep -qsxF -e "$state $extras" -e "$state [test,check]" .venv/installed; then
    return
  fi
  echo "Installing bigsvd$extras into $PWD/.venv" >&2
  if ! new_enough "$python" || ! "$python" -m pip --version >/dev/null 2>&1; then
    found=$(find_python)
    # Some systems ship venv without the pip that goes into it; then the system's own pip puts one there.
    if ! "$found" -m venv --clear .venv >/dev/null 2>&1; then
      "$found" -m venv --clear --without-pip .venv
      "$found" -m pip --python "$python" install -q pip
    fi
  fi
  "$python" -m pip install -q -e ".$extras"
  echo "$state $extras" > .venv/installed
}
