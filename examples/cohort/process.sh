#!/bin/sh
# Runs evenkeel over a raw BIDS dataset and says what to do next.
#   process.sh DATASET OUT [options of steady ...]
# The exit code is evenkeel's own, so that this script can stand in a larger one.
set -u
evenkeel=${EVENKEEL:-evenkeel}
dataset=$1
out=$2
shift 2

# What is there, and what is wrong with it? Nothing is written. 3 means that
# some runs will be refused: their faults are printed, the others can go ahead.
"$evenkeel" survey "$dataset"
code=$?
case $code in
0 | 3) ;;
65) echo "every run is refused: mend the sidecars named above" >&2; exit $code ;;
66) echo "no dataset, or no run in it" >&2; exit $code ;;
*) exit $code ;;
esac

# The job. Run again after an interruption, it goes on where it stopped.
"$evenkeel" steady "$dataset" "$out" --events --limit-mean-fd 0.5 --limit-lost 2 "$@"
code=$?
case $code in
0) echo "all runs are done" ;;
3) echo "some runs were refused or failed: column 'fault' of $out/runs.tsv says why" ;;
4) echo "all runs are done; some moved more than the limits: see mean_fd and lost in $out/runs.tsv" ;;
75) echo "interrupted: the same command goes on" >&2; exit $code ;;
*) exit $code ;;
esac

# Are the files what the records say, and the raw data what it was?
"$evenkeel" audit "$out" --dataset "$dataset" || exit $?
exit $code
