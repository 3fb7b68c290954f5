#!/usr/bin/env bash
# Bring up a real Slurm of one node, this machine, without systemd (tried on Debian 12, Slurm 22.05).
#
#   slurm_up.sh DIR      DIR gets configuration, state and logs; slurm_down.sh DIR ends it
#
# Exit codes: 0 it is up; 77 it cannot be had here, and the last line says why; 1 it did not come up.
# Every wait is bounded. It needs root, and installs packages when they are missing.
set -euo pipefail

cannot() { echo "$1"; exit 77; }

[ $# -eq 1 ] || { echo "usage: slurm_up.sh DIR"; exit 2; }
[ "$(id -u)" = 0 ] || cannot "Slurm cannot be brought up: this needs root"
command -v apt-get >/dev/null || cannot "Slurm cannot be brought up: this needs Debian's apt-get"
conf=/etc/slurm/slurm.conf
if [ -e "$conf" ] && ! grep -qs '^# waveassay test' "$conf"; then
    cannot "Slurm cannot be brought up: this machine has one of its own ($conf)"
fi

if ! command -v slurmctld slurmd sbatch munged >/dev/null; then
    export DEBIAN_FRONTEND=noninteractive
    log=$(mktemp)
    wanted="slurmctld slurmd slurm-client munge"
    # shellcheck disable=SC2086
    { timeout 120 apt-get update -qq && timeout 240 apt-get install -y -qq --no-install-recommends $wanted; } \
        >"$log" 2>&1 </dev/null || { tail -3 "$log"; cannot "Slurm cannot be brought up: apt-get could not install $wanted"; }
    rm -f "$log"
fi

mkdir -p "$1"
dir=$(readlink -f "$1")
host=$(hostname -s)
memory_mb=$(($(awk '/^MemTotal/ {print $2}' /proc/meminfo) / 1024 - 500))
mkdir -p "$dir"/{state,spool,log} /run/munge /etc/slurm

# Munge proves to each part of Slurm who the others are.
[ -s /etc/munge/munge.key ] || { umask 077; dd if=/dev/urandom of=/etc/munge/munge.key bs=1024 count=1 status=none; umask 022; }
chown -R munge:munge /etc/munge /run/munge /var/lib/munge /var/log/munge
chmod 400 /etc/munge/munge.key
chmod 755 /run/munge
if ! munge -n >/dev/null 2>&1; then
    timeout 20 runuser -u munge -- /usr/sbin/munged --num-threads=2
    cp /run/munge/munged.pid "$dir/munged.pid"
fi

cat >"$dir/slurm.conf" <<CONF
# waveassay test: a cluster of one node
ClusterName=waveassay
SlurmctldHost=$host(127.0.0.1)
SlurmUser=root
SlurmdUser=root
AuthType=auth/munge
SlurmctldPort=16817
SlurmdPort=16818
StateSaveLocation=$dir/state
SlurmdSpoolDir=$dir/spool
SlurmctldPidFile=$dir/slurmctld.pid
SlurmdPidFile=$dir/slurmd.pid
SlurmctldLogFile=$dir/log/slurmctld.log
SlurmdLogFile=$dir/log/slurmd.log
ProctrackType=proctrack/linuxproc
TaskPlugin=task/none
SelectType=select/cons_tres
SelectTypeParameters=CR_Core_Memory
SchedulerParameters=sched_interval=1,batch_sched_delay=0,sched_min_interval=0
MpiDefault=none
ReturnToService=2
SwitchType=switch/none
MinJobAge=600
DefMemPerCPU=500
JobAcctGatherType=jobacct_gather/none
AccountingStorageType=accounting_storage/none
NodeName=$host NodeAddr=127.0.0.1 CPUs=$(nproc) RealMemory=$memory_mb State=UNKNOWN
PartitionName=main Nodes=$host Default=YES MaxTime=INFINITE State=UP OverSubscribe=NO
CONF
# Jobs start further commands that lose SLURM_CONF on the way, so the file must be where all look.
ln -sf "$dir/slurm.conf" "$conf"
/usr/sbin/slurmctld -c -f "$dir/slurm.conf"
/usr/sbin/slurmd -c -f "$dir/slurm.conf"
for _ in $(seq 150); do
    timeout 5 sinfo --noheader --format=%T 2>/dev/null | grep -q idle && { echo "Slurm is up"; exit 0; }
    sleep 0.1
done
tail -5 "$dir"/log/*.log
echo "Slurm did not come up within 15 s"
exit 1
