#!/usr/bin/env bash
# Install what is missing and run the built-in scenario. Arguments go to `charflow demo`.
set -euo pipefail

# shellcheck source=decks/setup.sh
source "$(dirname -- "${BASH_SOURCE[0]}")/setup.sh"

set_up charflow
exec "$venv/bin/charflow" demo "$@"
