# Sourced by the other scripts: goes to the project's root and finds or makes its virtual environment.
#   $PHASEID_VENV   where the environment lies; default .venv in the project
#   $PYTHON         the interpreter to make it with; default the newest suitable one found

case "${PHASEID_VENV:-}" in
  "" | /*) ;;
  *) PHASEID_VENV="$PWD/$PHASEID_VENV" ;;
esac
cd "$(dirname "${BASH_SOURCE[0]}")/.." || exit 1
venv="${PHASEID_VENV:-$PWD/.venv}"

suitable() { "$1" -c 'import sys; sys.exit(sys.version_info < (3, 11))' 2>/dev/null; }

find_python() {
  local name
  for name in ${PYTHON:+"$PYTHON"} python3 python python3.14 python3.13 python3.12 python3.11; do
    if command -v "$name" >/dev/null && suitable "$name"; then
      echo "$name"
      return
    fi
  done
  echo "phaseid needs Python 3.11 or newer, and none was found." >&2
  echo "Install one, or name it: PYTHON=/path/to/python3.12 $0" >&2
  return 1
}

# install_project ARGS...: pip install ARGS into the environment, when pyproject.toml or ARGS changed
install_project() {
  local python stamp="$venv/.phaseid-installed" wanted
  if ! suitable "$venv/bin/python"; then
    python="$(find_python)" || exit 1
    echo "Making a virtual environment in $venv" >&2
    "$python" -m venv --clear "$venv" || {
      echo "No virtual environment could be made; on Debian and Ubuntu: apt install python3-venv" >&2
      exit 1
    }
  fi
  wanted="$* $(cksum <pyproject.toml)"
  if [[ "$(cat "$stamp" 2>/dev/null)" != "$wanted" || "$*" != *-e* ]]; then
    echo "Installing phaseid and what it needs (the first time takes a minute or two)" >&2
    "$venv/bin/python" -m pip install -qq --disable-pip-version-check \
      --no-warn-script-location "$@" || exit 1
    echo "$wanted" >"$stamp"
  fi
}
