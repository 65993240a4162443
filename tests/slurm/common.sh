# Shared by the scripts beside it, which set `state` first.

conf=$state/slurm.conf

# Runs a client of Slurm, which would wait for minutes where nobody answers.
client() {
  SLURM_CONF=$conf timeout 5 "$@"
}

# Prints `PID PARENT STATE` of every process; a name may hold blanks and brackets.
processes() {
  sed -n 's/^\([0-9]*\) (.*) \(.\) \([0-9]*\) .*/\1 \3 \2/p' /proc/[0-9]*/stat 2>/dev/null || true
}

# Whether process $1 lives; pid 1 of a container may reap late, so that the dead are still listed.
lives() {
  processes | awk -v pid="$1" '$1 == pid && $3 != "Z" { found = 1 } END { exit !found }'
}

# Prints the processes that were started with every given line in their environment.
with_environment() {
  for folder in /proc/[0-9]*; do
    for line in "$@"; do
      grep -qzxF -e "$line" "$folder/environ" 2>/dev/null || continue 2
    done
    echo "${folder#/proc/}"
  done
}

# Reads pids and prints them, their parents that are job daemons, and all descendants of these.
with_kin() {
  seeds=$(cat)
  for pid in $seeds; do
    parent=$(processes | awk -v pid="$pid" '$1 == pid { print $2 }')
    [ "$(cat "/proc/${parent:-0}/comm" 2>/dev/null)" = slurmstepd ] && seeds="$seeds $parent"
  done
  processes | awk -v seeds="$seeds" '
    BEGIN { count = split(seeds, list); for (i = 1; i <= count; i++) kin[list[i]] = 1 }
    { parent[$1] = $2 }
    END {
      do {
        grown = 0
        for (pid in parent) if (!(pid in kin) && (parent[pid] in kin)) { kin[pid] = 1; grown = 1 }
      } while (grown)
      for (pid in kin) print pid
    }'
}

# Prints the pid of daemon $1 of this cluster, if it lives.
daemon() {
  pid=$(awk -v name="$1" '$1 == name { print $2 }' "$state/daemons" 2>/dev/null)
  [ -n "$pid" ] && lives "$pid" && grep -qzF -e "$state" "/proc/$pid/cmdline" && echo "$pid"
}
