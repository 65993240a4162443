#!/bin/sh
# Stops what start.sh started with the same STATE, and every job that is left, processes that their node
# has lost sight of included.
#
# usage: stop.sh STATE
set -u
state=$1
. "$(dirname "$0")/common.sh"

# A node that was frozen must run to end its jobs.
for name in $(awk '{ print $1 }' "$state/daemons"); do
  pid=$(daemon "$name") && kill -CONT "$pid"
done
if daemon slurmctld > /dev/null; then
  client scancel --user="$(id -un)" 2>/dev/null
  tries=30
  while [ "$tries" -gt 0 ] && [ -n "$(client squeue -h 2>/dev/null)" ]; do
    tries=$((tries - 1))
    sleep 0.1
  done
fi
for name in $(awk '$1 ~ /^n[0-9]+$/ { print $1 }' "$state/daemons") slurmctld munged; do
  pid=$(daemon "$name") || continue
  kill -TERM "$pid"
  tries=50
  while [ "$tries" -gt 0 ] && lives "$pid"; do
    tries=$((tries - 1))
    sleep 0.1
  done
  lives "$pid" && kill -KILL "$pid"
done
for pid in $(with_environment "SLURM_CONF=$conf" | with_kin); do
  kill -KILL "$pid" 2>/dev/null
done
exit 0
