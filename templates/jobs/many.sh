
# from here on the script is the same for every scheduler: the run folder of each job has a script of its own
list={{ joblist }}
bundle={{ site.bundle }}

{% include "list.sh" %}

child=""
stopped=""
# shellcheck disable=SC2317 # called by the traps
stop() {
  stopped=$1
  if [ -n "$child" ]; then kill -s "$1" "$child" 2>/dev/null; fi
}
trap 'stop TERM' TERM
trap 'stop INT' INT
trap 'stop USR1' USR1
trap 'stop USR2' USR2
{% if timer %}

# this scheduler gives no warning before the time limit: the script warns itself
(sleep {{ timer }} && kill -USR1 $$) >/dev/null 2>&1 </dev/null &
timer=$!
trap 'kill "$timer" 2>/dev/null' EXIT
{% endif %}

echo "task $task${job_id:+ of $job_id}"
status=0
while read -r job; do
  [ -n "$stopped" ] && break
  bash "$here/${job%/jobs/*}/submit.sh" "jobs/${job##*/jobs/}" </dev/null &
  child=$!
  while :; do
    wait "$child"
    code=$?
    kill -0 "$child" 2>/dev/null || break
  done
  child=""
  if [ "$code" != 0 ]; then status=1; fi
done < <(listed)
if [ -n "$stopped" ]; then status=1; fi
exit $status
