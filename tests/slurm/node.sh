#!/bin/sh
# Makes a node fail: `lose` kills its daemon and all that its jobs run, `cut` stops the daemon from answering
# while its jobs go on.
#
# usage: node.sh STATE NODE lose|cut
set -eu
state=$1
node=$2
. "$(dirname "$0")/common.sh"

pid=$(daemon "$node")
case $3 in
  cut) kill -STOP "$pid" ;;
  lose)
    kill -KILL "$pid"
    for kin in $(with_environment "SLURM_CONF=$conf" "SLURMD_NODENAME=$node" | with_kin); do
      kill -KILL "$kin" 2>/dev/null || true
    done
    ;;
esac
