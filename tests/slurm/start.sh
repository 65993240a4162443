#!/bin/sh
# Starts a Slurm of its own for the tests: munged, slurmctld, and a slurmd for each node port, all on this
# machine and as root. Everything they write is below STATE, whose path must be short (sockets) and plain.
# Nodes are called n1, n2, ... and claim CORES cores each.
#
# usage: CORES=4 start.sh STATE CONTROLLER_PORT NODE_PORT...
set -eu
state=$1
controller_port=$2
shift 2
. "$(dirname "$0")/common.sh"

# munged wants to be reached by everybody and nobody else to write where its key is.
mkdir -p "$state/munge" "$state/save" "$state/log"
chmod 0755 "$state" "$state/munge"
: > "$state/daemons"

# Starts a daemon in the foreground of a session of its own, so that its pid is known.
launch() {
  name=$1
  shift
  SLURM_CONF=$conf setsid "$@" > "$state/log/$name.out" 2>&1 < /dev/null &
  echo "$name $!" >> "$state/daemons"
}

host=$(uname -n)
host=${host%%.*}
# They can be kept to the loopback only where the machine's own name leads there.
case $(getent ahostsv4 "$host" 2>/dev/null) in
  127.*) binding='CommunicationParameters=NoInAddrAny,NoCtldInAddrAny' ;;
  *) binding='# the name of this machine is not on the loopback' ;;
esac

# Beside what needs no cgroup and no database: a lost node is noticed soon, a requeued job is not held for
# two minutes (cred_expire), jobs go to the emptiest node (CR_LLN), and ended ones stay on show.
# An empty plugstack keeps the system's own out.
: > "$state/plugstack.conf"
cat > "$conf" <<END
ClusterName=trial
SlurmctldHost=$host(127.0.0.1)
SlurmctldPort=$controller_port
SlurmUser=root
SlurmdUser=root
$binding
AuthType=auth/munge
CredType=cred/munge
AuthInfo=socket=$state/munge/socket,cred_expire=5
StateSaveLocation=$state/save
SlurmdSpoolDir=$state/spool-%n
SlurmctldPidFile=$state/slurmctld.pid
SlurmdPidFile=$state/slurmd-%n.pid
SlurmctldLogFile=$state/log/slurmctld.log
SlurmdLogFile=$state/log/slurmd-%n.log
PlugStackConfig=$state/plugstack.conf
MailProg=/bin/true
ProctrackType=proctrack/pgid
TaskPlugin=task/none
JobAcctGatherType=jobacct_gather/none
AccountingStorageType=accounting_storage/none
JobCompType=jobcomp/none
MpiDefault=none
SelectType=select/cons_tres
SelectTypeParameters=CR_Core,CR_LLN
SchedulerType=sched/backfill
SchedulerParameters=bf_interval=1,sched_interval=1,batch_sched_delay=0
SlurmdParameters=config_overrides
SlurmdTimeout=10
KillWait=2
ReturnToService=2
MinJobAge=3600
END
nodes=0
names=
for port in "$@"; do
  nodes=$((nodes + 1))
  names=$names${names:+,}n$nodes
  echo "NodeName=n$nodes NodeHostname=$host NodeAddr=127.0.0.1 Port=$port CPUs=$CORES Boards=1 \
SocketsPerBoard=1 CoresPerSocket=$CORES ThreadsPerCore=1 RealMemory=1000 State=UNKNOWN"
done >> "$conf"
echo "PartitionName=work Nodes=$names Default=YES MaxTime=INFINITE State=UP" >> "$conf"

(umask 077 && dd if=/dev/urandom of="$state/munge/key" bs=1024 count=1 2>/dev/null)
launch munged munged --foreground --key-file="$state/munge/key" --socket="$state/munge/socket" \
  --pid-file="$state/munge/pid" --log-file="$state/log/munged.log" --seed-file="$state/munge/seed" \
  --origin=127.0.0.1
wait_for() {
  tries=300
  until "$@"; do
    tries=$((tries - 1))
    if [ "$tries" -eq 0 ]; then
      echo "no cluster after 30 s: $* does not hold" >&2
      tail -n 20 "$state"/log/* >&2
      exit 1
    fi
    sleep 0.1
  done
}
wait_for test -S "$state/munge/socket"
launch slurmctld slurmctld -D -f "$conf"
for node in $(echo "$names" | tr , ' '); do
  mkdir -p "$state/spool-$node"
  launch "$node" slurmd -D -f "$conf" -N "$node"
done
# A node that has not registered yet is shown as "idle*" or "unknown*".
all_idle() {
  [ "$(client sinfo -h -N -o '%T' 2>/dev/null | grep -cx idle)" = "$nodes" ]
}
wait_for all_idle
