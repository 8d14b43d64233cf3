task=${1:-$array_task}
here=""
for place in "$(dirname "$0")" "$submitted_from" "$PWD"; do
  if [ -n "$place" ] && [ -f "$place/$list" ]; then
    here=$(cd "$place" && pwd)
    break
  fi
done
if [ -z "$here" ]; then
  echo "{{ script }}: no $list here; submit it from inside the run folder" >&2
  exit 2
fi
named=""
case $task in
  all)
    first=1
    last=$(wc -l <"$here/$list")
    ;;
  jobs/?*)
    named=$task
    ;;
  '' | *[!0-9]*)
    echo "usage: {% if submit[:5] != "bash " %}{{ submit }}    or by hand: {% endif %}bash {{ script }} TASK    or: bash {{ script }} all" >&2
    exit 2
    ;;
  *)
    first=$(((10#$task - 1) * bundle + 1))
    last=$((10#$task * bundle))
    ;;
esac

# the job folders of this task, or the one that was named
listed() {
  if [ -n "$named" ]; then echo "$named"; else sed -n "${first},${last}p" "$here/$list"; fi
}
