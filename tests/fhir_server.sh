#!/usr/bin/env bash
# A real FHIR R4 server by other authors (PyPI sekmet-fhir, a server for integration tests) for the tests of the client:
# on loopback, with a store that is thrown away, in an environment of its own outside of the checkout. It is one process
# with one lock, so it does not show the races of a clustered server, and no TLS; it is never for patient data.
#
#   fhir_server.sh install    make its environment where missing, print its folder
#   fhir_server.sh start      install where missing, start, wait until it answers, print base_url=...
#   fhir_server.sh load DIR   put the resources of the *.ndjson files in DIR into the started server, context first
#   fhir_server.sh stop       end the server that was started with the same FHIR_DIR
#
# Settings (environment):
#   FHIR_DIR    settings, store, log and pid of one server     (default: ${TMPDIR:-/tmp}/fhir-test-server)
#   FHIR_VENV   the environment, which servers may share       (default: ${TMPDIR:-/tmp}/fhir-test-server/venv)
#   FHIR_PORT   port on 127.0.0.1                              (default: 8090)
#   FHIR_TOKEN  the only bearer token that is let in           (default: none, everybody is)
set -euo pipefail
REQUIREMENT=sekmet-fhir==0.1.1
CONSTRAINTS=$(cd "$(dirname "$0")/.." && pwd)/.ci/server-constraints.txt
DIR=${FHIR_DIR:-${TMPDIR:-/tmp}/fhir-test-server}
VENV=${FHIR_VENV:-${TMPDIR:-/tmp}/fhir-test-server/venv}
PORT=${FHIR_PORT:-8090}
BASE="http://127.0.0.1:$PORT/fhir"
PIDFILE="$DIR/pid"

running() { [ -f "$PIDFILE" ] && kill -0 "$(cat "$PIDFILE")" 2>/dev/null; }

install() {
  if "$VENV/bin/python" -c "
import importlib.metadata as metadata, sys
name, version = '$REQUIREMENT'.split('==')
sys.exit(metadata.version(name) != version)" 2>/dev/null; then return; fi
  python3 -m venv --clear "$VENV"
  "$VENV/bin/python" -m pip install -q --disable-pip-version-check -c "$CONSTRAINTS" "$REQUIREMENT" ||
    { echo "$REQUIREMENT cannot be installed into $VENV" >&2; exit 1; }
}

stop() {
  if running; then
    local process
    process=$(cat "$PIDFILE")
    kill "$process"
    for _ in $(seq 100); do
      kill -0 "$process" 2>/dev/null || break
      sleep 0.1
    done
    if kill -0 "$process" 2>/dev/null; then kill -9 "$process"; fi
  fi
  rm -f "$PIDFILE"
}

settings() {
  cat <<SETTINGS
base_url: $BASE
host: 127.0.0.1
port: $PORT
data_dir: $DIR/data
own_private_key_path: $DIR/data/none.pem
log_inbound: false
simulator: {enabled: false, delay_seconds: 0.2}
validation: {inbound: strict}
SETTINGS
  if [ -z "${FHIR_TOKEN:-}" ]; then
    echo "server_auth: {types: [none]}"
  else
    echo "server_auth: {types: [bearer], tokens: ['$FHIR_TOKEN']}"
  fi
}

answers() {
  "$VENV/bin/python" -c "import urllib.request; urllib.request.urlopen('$BASE/metadata', timeout=2)" 2>/dev/null
}

start() {
  # another server on the port would pass the check below in place of ours
  if (exec 3<>"/dev/tcp/127.0.0.1/$PORT") 2>/dev/null; then echo "port $PORT is in use" >&2; exit 1; fi
  mkdir -p "$DIR"
  rm -rf "$DIR/data"
  settings >"$DIR/settings.yaml"
  # all three standard streams are detached, so that a caller's pipe does not stay open
  nohup "$VENV/bin/sekmet" serve -c "$DIR/settings.yaml" </dev/null >"$DIR/server.log" 2>&1 &
  echo $! >"$PIDFILE"
  for _ in $(seq 300); do
    if answers; then echo "base_url=$BASE"; return; fi
    running || break
    sleep 0.1
  done
  echo "the server did not start; the end of its log:" >&2
  tail -20 "$DIR/server.log" >&2
  stop
  exit 1
}

load() {
  running || { echo "no server runs in $DIR; start one first" >&2; exit 1; }
  [ -d "$1" ] || { echo "no such folder: $1" >&2; exit 2; }
  "$VENV/bin/python" "$(dirname "$0")/fhir_load.py" "$BASE" "$1"
}

usage() {
  echo "usage: $0 install|start|load FOLDER|stop" >&2
  exit 2
}

case "${1:-}" in
install) install && echo "$VENV" ;;
start) install; start ;;
load) [ $# -eq 2 ] || usage; load "$2" ;;
stop) stop ;;
*) usage ;;
esac
