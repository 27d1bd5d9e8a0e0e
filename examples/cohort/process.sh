#!/bin/sh
# Runs evenkeel over a raw BIDS dataset and says what to do next.
#   process.sh DATASET OUT [options of steady ...]
# The exit code is evenkeel's own, so that this script can stand in a larger one.
set -u
evenkeel=${EVENKEEL:-evenkeel}
if [ $# -lt 2 ]; then
	echo "usage: $0 DATASET OUT [options of evenkeel steady ...]" >&2
	exit 64
fi
dataset=$1
out=$2
shift 2
set -- --events --limit-mean-fd 0.5 --limit-lost 2 "$@"

# What is there, what is wrong with it, what is left to do? The same options select the
# same runs; nothing is written. 3 means that some runs will be refused: their
# faults are printed, the others can go ahead.
"$evenkeel" steady "$dataset" "$out" --plan "$@"
code=$?
case $code in
0 | 3) ;;
65) echo "every run is refused: mend what is named above" >&2; exit $code ;;
66) echo "no dataset, or no run in it" >&2; exit $code ;;
*) exit $code ;;
esac

# The job. Run again after an interruption, it goes on where it stopped.
"$evenkeel" steady "$dataset" "$out" "$@"
code=$?
case $code in
0) echo "all runs are done" ;;
3) echo "some runs were refused or failed: column 'fault' of $out/runs.tsv says why" ;;
4) echo "all runs are done; some are outside a limit: column 'outside_limits' of $out/runs.tsv says which" ;;
75) echo "interrupted: the same command goes on" >&2; exit $code ;;
*) exit $code ;;
esac

# Are the files what the records say, and the raw data what it was?
"$evenkeel" audit "$out" --dataset "$dataset" || exit $?
exit $code
