#!/bin/sh
# A sweep as a Slurm job array, a line per command. Type them one by one where jobs are submitted; the options in capitals are
# your cluster's. Without Slurm, the third line alone, without its options, does the same on this machine.
set -eu
cd "$(dirname "$0")/../configs"
driblet sweep plan diameter_by_load.toml -o "$HOME/diameter_by_load"   # every point validated; events, time and disk estimated
driblet sweep work "$HOME/diameter_by_load" --slurm --points-per-task 8 --time 30 --memory 1G --throttle 20 ${PARTITION:+--partition "$PARTITION"} ${ACCOUNT:+--account "$ACCOUNT"} ${SETUP:+--setup "$SETUP"}
driblet sweep status "$HOME/diameter_by_load"                          # from the disk and the queue, as often as you like
echo 'when status says that nothing is left (else: the "work" line again):'
echo "  driblet sweep collect $HOME/diameter_by_load -o diameter_by_load   # .csv and .h5, units in the head"
echo "  driblet plot diameter_by_load.h5 -o diameter_by_load.png           # the map, with the line of 95 %"
