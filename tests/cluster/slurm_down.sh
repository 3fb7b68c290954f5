#!/usr/bin/env bash
# End what slurm_up.sh DIR began: its jobs, its daemons (by their own process numbers), its link.
set -uo pipefail
dir=$(readlink -f "${1:?usage: slurm_down.sh DIR}")
[ "$(readlink -f /etc/slurm/slurm.conf)" = "$dir/slurm.conf" ] && timeout 10 scancel --user=root 2>/dev/null
for name in slurmd slurmctld munged; do
    [ -s "$dir/$name.pid" ] || continue
    pid=$(cat "$dir/$name.pid")
    kill "$pid" 2>/dev/null
    for _ in $(seq 50); do kill -0 "$pid" 2>/dev/null || break; sleep 0.1; done
    kill -9 "$pid" 2>/dev/null
done
[ "$(readlink -f /etc/slurm/slurm.conf)" = "$dir/slurm.conf" ] && rm -f /etc/slurm/slurm.conf
exit 0
