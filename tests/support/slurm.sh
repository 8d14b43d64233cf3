#!/usr/bin/env bash
# A Slurm of one node on the loopback interface, without systemd, all its state under one folder. For tests only.
#   slurm.sh start DIR CTLD_PORT NODE_PORT CPUS    prints the line to evaluate: export SLURM_CONF=...
#   slurm.sh stop DIR
# CPUS may exceed what the machine has. Needs Debian's slurmctld slurmd slurm-client munge.
set -euo pipefail
PATH=$PATH:/usr/sbin:/sbin
command=$1
mkdir -p "$2"
base=$(cd "$2" && pwd)
export SLURM_CONF=$base/slurm.conf
socket=$base/munge/munge.sock

configure() {
  local node user memory
  node=$(hostname -s)
  user=$(id -un)
  memory=$(awk '/MemTotal/ {print int($2 * 0.9 / 1024)}' /proc/meminfo)
  cat >"$SLURM_CONF" <<CONF
ClusterName=test
SlurmctldHost=$node(127.0.0.1)
SlurmUser=$user
SlurmdUser=$user
SlurmctldPort=$1
SlurmdPort=$2
CommunicationParameters=NoInAddrAny,NoCtldInAddrAny
AuthType=auth/munge
AuthInfo=socket=$socket
CryptoType=crypto/munge
StateSaveLocation=$base/state
SlurmdSpoolDir=$base/spool
SlurmctldPidFile=$base/slurmctld.pid
SlurmdPidFile=$base/slurmd.pid
SlurmctldLogFile=$base/log/slurmctld.log
SlurmdLogFile=$base/log/slurmd.log
MpiDefault=none
SwitchType=switch/none
ProctrackType=proctrack/linuxproc
TaskPlugin=task/none
JobAcctGatherType=jobacct_gather/none
AccountingStorageType=accounting_storage/none
JobCompType=jobcomp/none
SelectType=select/cons_tres
SelectTypeParameters=CR_Core
SchedulerType=sched/backfill
SchedulerParameters=sched_interval=1,sched_min_interval=0,bf_interval=1
MinJobAge=86400
ReturnToService=2
KillWait=5
OverTimeLimit=0
InactiveLimit=0
SlurmdParameters=config_overrides
NodeName=$node NodeAddr=127.0.0.1 CPUs=$3 Boards=1 SocketsPerBoard=1 CoresPerSocket=$3 ThreadsPerCore=1 RealMemory=$memory State=UNKNOWN
PartitionName=debug Nodes=$node Default=YES MaxTime=01:00:00 DefaultTime=00:10:00 State=UP
CONF
}

alive() { [ -s "$1" ] && kill -0 "$(cat "$1")" 2>/dev/null; }

start() {
  mkdir -p "$base"/{state,spool,log,munge}
  chmod 0755 "$base"
  chmod 0711 "$base/munge"
  dd if=/dev/urandom bs=1 count=1024 of="$base/munge/munge.key" status=none
  chmod 0400 "$base/munge/munge.key"
  configure "$1" "$2" "$3"
  # --force: the state folder may have a world-writable parent
  munged --force --num-threads=2 --socket="$socket" --key-file="$base/munge/munge.key" \
    --seed-file="$base/munge/munge.seed" --log-file="$base/munge/munged.log" --pid-file="$base/munge/munged.pid"
  slurmctld -f "$SLURM_CONF" -c
  slurmd -f "$SLURM_CONF"
  for _ in $(seq 1 300); do
    if [ "$(timeout 3 sinfo -h -o %T 2>/dev/null)" = idle ]; then
      echo "$SLURM_CONF"
      return 0
    fi
    sleep 0.2
  done
  tail -n 20 "$base"/log/*.log >&2
  return 1
}

stop() {
  timeout 10 scancel --user="$(id -un)" 2>/dev/null || true
  for _ in $(seq 1 40); do
    [ -z "$(timeout 5 squeue -h -t R,CG,CF -o %A 2>/dev/null)" ] && break
    sleep 0.25
  done
  for file in slurmd.pid slurmctld.pid munge/munged.pid; do
    alive "$base/$file" && kill "$(cat "$base/$file")" 2>/dev/null
  done
  return 0
}

case $command in
  start) start "$3" "$4" "$5" ;;
  stop) stop ;;
  *) exit 2 ;;
esac
