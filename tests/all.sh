#!/usr/bin/env bash
# Runs every check in a fresh environment, as continuous integration does. Needs Python 3.11 or newer and the network.
# Further arguments go to pytest: `bash tests/all.sh -m benchmark` runs the benchmarks instead.
set -euo pipefail
cd "$(dirname "$0")/.."

python3 -c 'import sys; sys.exit(sys.version_info < (3, 11))' || { echo "Python 3.11 or newer is needed" >&2; exit 1; }
rm -rf .venv-tests
python3 -m venv .venv-tests
.venv-tests/bin/python -m pip install --quiet --disable-pip-version-check -c .ci/constraints.txt --editable '.[test]'
export PATH="$PWD/.venv-tests/bin:$PATH"
# The pages are tried in a real browser.
if [ -z "${SPRT_TEST_BROWSER:-}" ] && ! command -v chromium chromium-browser google-chrome >/dev/null; then
  [ "$(id -u)" = 0 ] && command -v apt-get >/dev/null || { echo "Install Chromium, or name a browser: SPRT_TEST_BROWSER" >&2; exit 1; }
  echo "== installing Chromium"
  { apt-get update -qq && DEBIAN_FRONTEND=noninteractive apt-get install -y -qq --no-install-recommends chromium; } >/dev/null
fi
unset PYTHONDONTWRITEBYTECODE # the tests start the program some hundred times

echo "== style"
ruff check .
ruff format --check .
echo "== types"
mypy
echo "== imports keep to the house"
lint-imports
echo "== tests"
# On two processes, each with a service and a database server of its own; alone where figures are taken or shown.
case " $* " in
*" benchmark "* | *" -s "*) processes=0 ;;
*) processes=2 ;;
esac
python -m pytest -n "$processes" --dist worksteal "$@"
