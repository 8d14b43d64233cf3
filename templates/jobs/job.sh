
# from here on the script is the same for every scheduler
list={{ joblist }}
bundle={{ site.bundle }}
cores={{ cores }}
beat=${STRAINKIT_BEAT:-60} # seconds between signs of life

{% include "list.sh" %}

{% for name in site.modules %}
module load {{ name | shell }}
{% endfor %}
export OMP_NUM_THREADS={{ site.threads }}
{% for line in site.setup %}
{{ line }}
{% endfor %}

# what this program needs: make_inputs, run_program, is_finished, tidy_up; n is the number of the attempt
{{ steps }}
{% if site.scratch %}

# brings new results from the node's own disk to the job folder: beside their place first, then renamed into it
bring_back() {
  local file
  cd "$work" || return
  for file in {{ keep }}; do
    if [ -f "$file" ] && ! cmp -s "$file" "$folder/$file"; then
      cp "$file" "$folder/.$file.new" && mv "$folder/.$file.new" "$folder/$file"
    fi
  done
}
{% endif %}

child=""
heart=""
stopped=""
# shellcheck disable=SC2317 # called by the traps
stop() {
  stopped=$1
  [ -n "$child" ] || return
  kill -TERM -- "-$child" 2>/dev/null
  (sleep 20 && kill -KILL -- "-$child") >/dev/null 2>&1 &
}
trap 'stop TERM' TERM
trap 'stop INT' INT
trap 'stop USR1' USR1
trap 'stop USR2' USR2

say() { # one line in the job's log
  printf '%s %s %s %s\n' "$1" "$n" "$(date -u +%Y-%m-%dT%H:%M:%SZ)" "$2" >>"$folder/attempts.txt"
}

# the folder "running" is a claim that only one task can make; it is touched while that task lives
claim() {
  mkdir "$folder/running" 2>/dev/null && return
  local seen
  seen=$(date -r "$folder/running" +%s 2>/dev/null)
  if [ $(($(date +%s) - ${seen:-0})) -lt $((10 * beat)) ]; then
    sleep $((beat + beat / 2))
    if [ "$(date -r "$folder/running" +%s 2>/dev/null)" != "$seen" ]; then return 1; fi
  fi
  rmdir "$folder/running" 2>/dev/null
  mkdir "$folder/running" 2>/dev/null
}

do_job() {
  folder=$here/$1
  local code result=failed
  cd "$folder" || return 1
  if [ -e "done" ]; then
    echo "$1: done before"
    return 0
  fi
  if ! claim; then
    echo "$1: another task computes it now" >&2
    return 1
  fi
  n=$(($(grep -c '^start ' attempts.txt 2>/dev/null) + 1))
  say start "$cores $(hostname) ${job_id:--}"
  (while kill -0 $$ 2>/dev/null && touch -c "$folder/running"; do sleep "$beat"; done) >/dev/null 2>&1 </dev/null &
  heart=$!
  work=$folder
{% if site.scratch %}
  work="{{ site.scratch }}/strainkit-$$-$(basename "$1")"
  mkdir -p "$work" && find . -maxdepth 1 -type f -exec cp -p {} "$work" \;
{% endif %}
  cd "$work" || return 1
  if make_inputs && [ -z "$stopped" ]; then
    set -m
    run_program &
    child=$!
    set +m
    while :; do
      wait "$child"
      code=$?
      kill -0 "$child" 2>/dev/null || break
    done
    child=""
  else
    code=1
  fi
{% if site.scratch %}
  bring_back
{% endif %}
  cd "$folder" || return 1
  if is_finished; then
    result="done"
    say end "done $code"
    echo "$n" >"done"
    tidy_up
  elif [ -n "$stopped" ]; then
    result=stopped
    say end "stopped-by-$stopped $code"
  else
    say end "failed $code"
  fi
{% if site.scratch %}
  rm -rf "$work"
{% endif %}
  kill "$heart" 2>/dev/null
  rmdir running
  echo "$1: $result, attempt $n"
  [ "$result" = "done" ]
}
{% if timer %}

# this scheduler gives no warning before the time limit: the script warns itself
(sleep {{ timer }} && kill -USR1 $$) >/dev/null 2>&1 </dev/null &
timer=$!
trap 'kill "$timer" 2>/dev/null' EXIT
{% endif %}

status=0
while read -r job; do
  [ -n "$stopped" ] && break
  do_job "$job" </dev/null || status=1
done < <(listed)
if [ -n "$stopped" ]; then status=1; fi
exit $status
