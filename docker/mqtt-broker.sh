#!/bin/sh
# Runs mosquitto once labmon has written who may come in, and has it read those files again when they change.
# ACCESS: folder of both files; SETTINGS: mosquitto's own file.
ACCESS=${ACCESS:-/access}
SETTINGS=${SETTINGS:-/mosquitto/config/mosquitto.conf}
state() { cksum "$ACCESS/passwords" "$ACCESS/rules" 2>/dev/null; }

until [ -s "$ACCESS/passwords" ] && [ -s "$ACCESS/rules" ]; do sleep 1; done
seen=$(state)
mosquitto -c "$SETTINGS" &
broker=$!
trap 'kill -TERM "$broker"; wait "$broker"; exit 0' TERM INT
while kill -0 "$broker" 2>/dev/null; do
  sleep 1
  now=$(state)
  [ "$now" = "$seen" ] || { seen=$now; kill -HUP "$broker"; }
done
wait "$broker"
