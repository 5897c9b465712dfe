# Sourced by decks/demo.sh and tests/run.sh: system packages first, then the virtual environment.
# shellcheck shell=bash

root=$(cd -- "$(dirname -- "${BASH_SOURCE[0]}")/.." && pwd)
venv=$root/.venv

say() { printf 'charflow: %s\n' "$*" >&2; }

die() {
  say "$@"
  exit 3
}

# A log nobody needs unless the command fails.
quietly() {
  local log status=0
  log=$(mktemp)
  "$@" >"$log" 2>&1 </dev/null || status=$?
  if ((status)); then cat -- "$log" >&2; fi
  rm -f -- "$log"
  return "$status"
}

is_root() { ((EUID == 0)); }

as_root() {
  if is_root; then "$@"; else sudo "$@"; fi
}

# All hits on PATH are tried: an old python3 may stand before a new one.
find_python() {
  local python
  while read -r python; do
    if "$python" -c "import sys, ${1:-sys}; sys.exit(sys.version_info < (3, 11))" 2>/dev/null; then
      printf '%s\n' "$python"
      return
    fi
  done < <(type -aP python3 python3.14 python3.13 python3.12 python3.11)
  return 1
}

# Asked of the system, not of its package manager, so that what was installed any other way counts.
have() {
  case $1 in
    python3) find_python >/dev/null ;;
    python3-venv) find_python "venv, ensurepip" >/dev/null ;;
    libngspice0)
      [[ -n ${NGSPICE_LIBRARY_PATH:-} ]] ||
        PATH=$PATH:/usr/sbin:/sbin ldconfig -p 2>/dev/null | grep -F libngspice.so >/dev/null
      ;;
    ca-certificates) [[ -s /etc/ssl/certs/ca-certificates.crt || -s /etc/pki/tls/certs/ca-bundle.crt ]] ;;
    opensta) type -P sta >/dev/null ;;
    *) type -P "$1" >/dev/null ;;
  esac
}

describe() {
  case $1 in
    python3) echo "Python 3.11 or newer, as python3" ;;
    python3-venv) echo "Python's own venv and ensurepip modules" ;;
    ngspice) echo "the ngspice program" ;;
    libngspice0) echo "the ngspice shared library, libngspice.so" ;;
    ca-certificates) echo "the root certificates of the web" ;;
    *) echo "the program $1" ;;
  esac
}

missing() {
  local name
  for name; do
    if ! have "$name"; then printf '%s\n' "$name"; fi
  done
}

stop_for() {
  local reason=$1 name
  shift
  say "$reason Please install, then run this again:"
  for name; do printf '  - %s (Debian and Ubuntu: %s)\n' "$(describe "$name")" "$name" >&2; done
  exit 3
}

# The waiting is for a fresh machine, whose own updates hold the lock; and no service is restarted for us.
apt_get() {
  quietly as_root env DEBIAN_FRONTEND=noninteractive NEEDRESTART_SUSPEND=1 \
    apt-get -y -o DPkg::Lock::Timeout=300 -o Acquire::Retries=3 "$@"
}

# want_packages required|optional PACKAGE...: install those that are missing.
# Without a required one the script ends; without an optional one it goes on, and says so.
want_packages() {
  local need=$1 name
  local -a lacking
  shift
  mapfile -t lacking < <(missing "$@")
  if ((${#lacking[@]} == 0)); then return; fi
  if ! type -P apt-get >/dev/null; then
    forgo "$need" "This system has no apt-get." "${lacking[@]}"
  elif ! is_root && ! type -P sudo >/dev/null; then
    forgo "$need" "Installing needs root, and there is no sudo." "${lacking[@]}"
  elif [[ $need == required ]]; then
    say "installing ${lacking[*]}"
    apt_get update || die "apt-get could not read the package lists."
    apt_get install --no-install-recommends "${lacking[@]}" || die "apt-get could not install ${lacking[*]}."
    mapfile -t lacking < <(missing "${lacking[@]}")
    if ((${#lacking[@]})); then stop_for "The packages of this system do not bring all that is needed." "${lacking[@]}"; fi
  else
    # A package this release lacks must not cost a network round each time.
    if ! compgen -G '/var/lib/apt/lists/*_Packages*' >/dev/null; then apt_get update || true; fi
    for name in "${lacking[@]}"; do
      if ! apt-cache show "$name" >/dev/null 2>&1; then
        say "going on without $name, which the package lists of this system do not have"
      elif say "installing $name" && ! apt_get install --no-install-recommends "$name"; then
        say "going on without $name, which apt-get could not install"
      fi
    done
  fi
}

forgo() {
  local need=$1 reason=$2
  shift 2
  if [[ $need == required ]]; then stop_for "$reason" "$@"; else say "$reason Going on without $*."; fi
}

# Both a moved clone and another Python leave scripts that point nowhere.
made_for() {
  printf '%s ' "$root"
  "$venv/bin/python" -c 'import sys; print(*sys.version_info[:2])' 2>/dev/null || true
}

make_venv() {
  local -a clear=()
  if [[ -e $venv/made-for ]]; then
    if [[ $(<"$venv/made-for") == "$(made_for)" ]]; then return; fi
    clear=(--clear)
  elif "$venv/bin/python" -c 'import sys, pip; sys.exit(sys.version_info < (3, 11))' 2>/dev/null; then
    return # somebody's own environment: used, never cleared
  fi
  say "making a virtual environment in .venv"
  quietly "$(find_python "venv, ensurepip")" -m venv "${clear[@]}" "$venv" || die "could not make $venv."
  made_for >"$venv/made-for"
}

# set_up charflow|charflow[EXTRA]: installed editable, so that what runs is this tree.
# No network when pyproject.toml is the one last installed; an extra brings charflow too.
set_up() {
  local wanted=$1 key
  [[ -f $root/pyproject.toml ]] || die "$root is not a clone of charflow; an installed one runs 'charflow demo'."
  want_packages required python3 python3-venv ngspice libngspice0 ca-certificates
  make_venv
  key=$(sha256sum <"$root/pyproject.toml")
  key="${key%% *} $wanted"
  if grep -qsF -- "$key" "$venv/installed"; then return; fi
  say "installing $wanted into .venv; this can take some minutes"
  quietly "$venv/bin/python" -m pip install --disable-pip-version-check --no-input \
    --editable "$root${wanted#charflow}" || die "pip could not install $wanted."
  printf '%s\n' "$key" >"$venv/installed"
}
