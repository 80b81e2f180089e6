#!/bin/sh
# A step of a shell pipeline:  sh rules/shell_step.sh RULES BATCH.csv
# Released batches go on to the loader (here: the folder $RELEASED), held ones wait in $HELD for a person.
# It ends with the status of the gate, so that whatever started it sees 0, 1 (held) or 2 (trouble).
set -u
rules=$1 batch=$2

status=0
sercheck gate "$rules" "$batch" --released-to "${RELEASED:-released}" --held-to "${HELD:-held}" || status=$?

case $status in
    0) echo "loading $(basename "$batch")" ;;   # put the loader here
    1) echo "held: $(basename "$batch") waits in ${HELD:-held}" >&2 ;;
    *) echo "trouble: $(basename "$batch") stays where it is" >&2 ;;
esac
exit "$status"
