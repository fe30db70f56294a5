#!/usr/bin/env bash
# A whole SLURM on this one machine, for tests: its own key, sockets, ports and folder, so that it
# meets no other. Needs root and Debian's slurm-wlm and munge.
#
#   slurm.sh up FOLDER     starts it and waits until it takes jobs; then export
#                          SLURM_CONF=FOLDER/slurm.conf
#   slurm.sh down FOLDER   ends it
set -euo pipefail
folder=$(mkdir -p "$2" && cd "$2" && pwd)
export SLURM_CONF="$folder/slurm.conf"

down() {
  for name in slurmd slurmctld munged; do
    [ -f "$folder/$name.pid" ] || continue
    kill -9 "$(cat "$folder/$name.pid")" 2>/dev/null || true  # nothing of it is kept
  done
}

free_port() {
  python3 -c 'import socket; s = socket.socket(); s.bind(("", 0)); print(s.getsockname()[1])'
}

up() {
  host=$(hostname -s)
  memory=$(awk '/MemTotal/ { print int($2 / 1024) - 1024 }' /proc/meminfo)
  mkdir -p "$folder/state" "$folder/spool"
  chmod 755 "$folder"
  dd if=/dev/urandom of="$folder/munge.key" bs=128 count=1 status=none
  chmod 400 "$folder/munge.key"
  cat >"$SLURM_CONF" <<CONF
ClusterName=tests
SlurmctldHost=$host(127.0.0.1)
SlurmctldPort=$(free_port)
SlurmdPort=$(free_port)
SlurmUser=root
SlurmdUser=root
AuthType=auth/munge
AuthInfo=socket=$folder/munge.socket
CredType=cred/munge
ProctrackType=proctrack/linuxproc
TaskPlugin=task/none
JobAcctGatherType=jobacct_gather/none
AccountingStorageType=accounting_storage/none
SelectType=select/cons_tres
SelectTypeParameters=CR_CPU
SchedulerParameters=sched_interval=1,batch_sched_delay=0,sched_min_interval=0
MinJobAge=10
ReturnToService=2
SwitchType=switch/none
MpiDefault=none
StateSaveLocation=$folder/state
SlurmdSpoolDir=$folder/spool
SlurmctldPidFile=$folder/slurmctld.pid
SlurmdPidFile=$folder/slurmd.pid
SlurmctldLogFile=$folder/slurmctld.log
SlurmdLogFile=$folder/slurmd.log
NodeName=$host NodeAddr=127.0.0.1 CPUs=2 RealMemory=$memory
PartitionName=all Nodes=ALL Default=YES State=UP
CONF
  trap down ERR
  munged --force --key-file="$folder/munge.key" --socket="$folder/munge.socket" \
    --pid-file="$folder/munged.pid" --log-file="$folder/munged.log" --seed-file="$folder/munged.seed"
  slurmctld
  slurmd
  for _ in $(seq 150); do
    [ "$(sinfo -h -o %t 2>/dev/null)" = idle ] && return
    sleep 0.1
  done
  echo "SLURM took no jobs within 15 s" >&2
  tail -n 5 "$folder"/*.log >&2
  down
  return 1
}

case "$1" in
  up) up ;;
  down) down ;;
  *) echo "slurm.sh up|down FOLDER" >&2; exit 2 ;;
esac
