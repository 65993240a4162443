#!/bin/sh
# An outside method for rankassay in plain POSIX shell: it shows the protocol and is no good heuristic.
# Called as `sh method.sh FOLDER`; answers with a first column of ones in every block, that is X_k = 11'.
set -eu
folder=$1
awk '
  function number(text) { gsub(/[^0-9]/, "", text); return text + 0 }
  {
    line = $0
    while (match(line, /"order": *[0-9]+/)) {
      orders[++blocks] = number(substr(line, RSTART, RLENGTH))
      line = substr(line, RSTART + RLENGTH)
    }
    if (match($0, /"nonnegative": *[0-9]+/)) scalars = number(substr($0, RSTART, RLENGTH))
  }
  END {
    printf "{\"version\": 1, \"blocks\": ["
    for (k = 1; k <= blocks; k++) {
      printf "%s{\"factor\": [", (k > 1 ? ", " : "")
      for (i = 1; i <= orders[k]; i++) printf "%s[1]", (i > 1 ? ", " : "")
      printf "]}"
    }
    printf "], \"nonnegative\": ["
    for (i = 1; i <= scalars; i++) printf "%s1", (i > 1 ? ", " : "")
    print "], \"stop\": \"stalled\"}"
  }' "$folder/problem.json" > "$folder/answer.json"
