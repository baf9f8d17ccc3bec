#!/usr/bin/env bash
# Batch job: the service beside the solver in one allocation. Plain shell; the directives of two common schedulers stand
# below as comments, one of which to keep. Give the solver's command line as arguments:
#
#   sbatch docker/batch-job.sh mpirun ./solver case.ini        (or: qsub, or plain bash docker/batch-job.sh ...)
#
# The solver posts to $SLACKWATER_URL with one of the clients. A solver whose source is closed writes its snapshots as files:
# set WATCH_FOLDER to where they come, DECLARATION to the JSON of the run if the files do not say it all, and STOP_FILE to
# the file that the solver looks for; it is left there when the modes have settled.
# The job ends when the solver ends. It never ends the solver by force: what it does on the advice is its own affair.
#
#SBATCH --job-name=slackwater
#SBATCH --nodes=1
#SBATCH --ntasks=16
#SBATCH --time=24:00:00
##PBS -l select=1:ncpus=16,walltime=24:00:00
set -euo pipefail
[ $# -gt 0 ] || { echo "usage: $0 SOLVER [ARGUMENTS...]" >&2; exit 2; }

# Where results are kept: a file system that outlives the job. Scratch on the node would be lost with it.
data=${SLACKWATER_DATA_DIRECTORY:-$PWD/slackwater-data}
# Two threads are enough for the update; take them off the solver's share if the node is full.
export OMP_NUM_THREADS=${OMP_NUM_THREADS:-1}
# Ranks on other nodes reach the service by the name of this one, and beyond loopback it asks for a token. Set
# SLACKWATER_HOST=0.0.0.0 for that; the token below is made for this job alone and inherited by the solver.
host=${SLACKWATER_HOST:-127.0.0.1}
if [ "$host" != 127.0.0.1 ]; then
    SLACKWATER_TOKEN=${SLACKWATER_TOKEN:-$(od -An -N16 -tx1 /dev/urandom | tr -d ' \n')}
    export SLACKWATER_TOKEN
fi

log=$data.log
mkdir -p "$data"
: >"$log.out"
slackwater serve --host "$host" --port 0 --data-directory "$data" >"$log.out" 2>>"$log" &
service=$!
watcher=
finish() {
    [ -z "$watcher" ] || kill "$watcher" 2>/dev/null || true
    kill -TERM "$service" 2>/dev/null || true # in order: what was acknowledged is safe already
    wait "$service" 2>/dev/null || true
}
trap finish EXIT
trap 'exit 143' TERM # a scheduler that runs out of time

# The first line names the address, with the free port that was taken.
for _ in $(seq 300); do
    address=$(sed -n 's/^Slackwater listens on //p' "$log.out")
    [ -z "$address" ] || break
    kill -0 "$service" 2>/dev/null || { echo "the service did not start; see $log" >&2; exit 1; }
    sleep 0.2
done
[ -n "$address" ] || { echo "the service did not start in time; see $log" >&2; exit 1; }
port=${address##*:}
[ "$host" = 127.0.0.1 ] && name=127.0.0.1 || name=$(hostname)
export SLACKWATER_URL=http://$name:${port%%/*}
echo "Slackwater for this job: $SLACKWATER_URL, data in $data"

watch=(slackwater watch-folder "${WATCH_FOLDER:-}" ${DECLARATION:+--declaration "$DECLARATION"})
if [ -n "${WATCH_FOLDER:-}" ]; then
    "${watch[@]}" ${STOP_FILE:+--touch "$STOP_FILE"} >>"$log" 2>&1 &
    watcher=$!
fi

code=0
"$@" || code=$?
if [ -n "$watcher" ]; then # what the solver wrote last: a watch may be ended anywhere, and the next one goes on there
    kill "$watcher" 2>/dev/null || true
    wait "$watcher" 2>/dev/null || true
    watcher=
    "${watch[@]}" --end-after-idle 5
fi
exit "$code"
