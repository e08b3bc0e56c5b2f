# Sourced by the other scripts: one virtual environment for the checkout, made and renewed only when needed.
# Needs nothing but Python 3.11 or newer. Leaves $root (the checkout) and $venv_python (its interpreter).

root=$(cd "$(dirname "${BASH_SOURCE[0]}")/.." && pwd -P)
venv="$root/.venv"
venv_python="$venv/bin/python"

say() { printf '%s\n' "$*" >&2; }

# Prints the first interpreter that is new enough and can make an environment; explains what is missing otherwise.
find_python() {
  local candidate new_enough=""
  for candidate in python3 python3.13 python3.12 python3.11 python3.14 python; do
    command -v "$candidate" >/dev/null 2>&1 || continue
    "$candidate" -c 'import sys; sys.exit(sys.version_info < (3, 11))' >/dev/null 2>&1 || continue
    : "${new_enough:=$candidate}"
    if "$candidate" -c 'import venv, ensurepip' >/dev/null 2>&1; then
      printf '%s\n' "$candidate"
      return 0
    fi
  done
  if [ -n "$new_enough" ]; then
    local version
    version=$("$new_enough" -c 'import sys; print("%d.%d" % sys.version_info[:2])')
    say "$new_enough (Python $version) is here, but its modules venv and ensurepip are not."
    say "On Debian or Ubuntu install them with: sudo apt install python$version-venv"
    say "Elsewhere install Python $version from python.org or with your package manager, then run this again."
  else
    say "kernelfit needs Python 3.11 or newer, and none was found (looked for python3, python3.11 to python3.14, python)."
    if command -v python3 >/dev/null 2>&1; then
      say "What is here: $(command -v python3), $(python3 --version 2>&1 | head -n 1)"
    fi
    say "On Debian 12, Ubuntu 24.04 or newer: sudo apt install python3 python3-venv"
    say "Elsewhere: install it from python.org or with your package manager, then run this again."
  fi
  return 1
}

# What the environment was installed from. It changes with the dependencies and when the checkout moves.
fingerprint() {
  "$venv_python" - "$root" <<'PYTHON'
import hashlib, pathlib, sys
root = pathlib.Path(sys.argv[1])
print(hashlib.sha256((root / "pyproject.toml").read_bytes() + str(root).encode() + sys.version.encode()).hexdigest())
PYTHON
}

# ensure_environment [EXTRA]: makes .venv if absent and installs the package (with an extra) if anything changed.
ensure_environment() {
  local extra="${1:-}" what="$root" stamp now python
  # An environment made with one extra serves without it too; one stamp per extra says which are in it.
  stamp="$venv/installed${extra:+-$extra}"
  [ -n "$extra" ] && what="$root[$extra]"
  if ! "$venv_python" -m pip --version >/dev/null 2>&1; then
    python=$(find_python) || return 1
    say "Making the environment $venv with $("$python" --version)"
    "$python" -m venv --clear "$venv" || {
      say "The environment could not be made. Delete $venv and see the message above."
      return 1
    }
  fi
  now=$(fingerprint) || return 1
  if [ -f "$stamp" ] && [ "$(cat "$stamp")" = "$now" ]; then
    return 0
  fi
  say "Installing kernelfit and what it needs into $venv (a few minutes the first time)"
  "$venv_python" -m pip install --quiet --disable-pip-version-check --editable "$what" || {
    say "The installation failed; pip's message stands above. It needs a connection to a Python package index."
    return 1
  }
  printf '%s\n' "$now" >"$stamp"
}
