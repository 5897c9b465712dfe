#!/usr/bin/env bash
# Install what is missing, check style, types and layering, and run all tests. Arguments go to pytest.
set -euo pipefail

# shellcheck source=decks/setup.sh
source "$(dirname -- "${BASH_SOURCE[0]}")/../decks/setup.sh"

set_up 'charflow[test]'
want_packages optional opensta yosys
cd -- "$root"
failed=()

# One failed check does not hide what the next would say. To stderr, as pytest has the last word on stdout.
check() {
  local program=$1
  say "$*"
  "$venv/bin/$program" "${@:2}" >&2 || failed+=("$*;")
}

check ruff check .
check ruff format --check .
check mypy
check lint-imports --no-logo
if ((${#failed[@]})); then say "whatever the tests say, this run fails at: ${failed[*]}"; fi

"$venv/bin/python" -m pytest "$@"
((${#failed[@]} == 0))
