# the lines of an output, without one that was cut short
whole_lines() {
  if [ -n "$(tail -c 1 "$1")" ]; then sed '$d' "$1"; else cat "$1"; fi
}

# an attempt begins with the ions (and, in a variable-cell run, the cell) where the last one stopped
make_inputs() {
  local k
  cp pw.in "pw-$n.in"
  for ((k = n - 1; k > 0; k--)); do
    [ -s "pw-$k.out" ] || continue
    awk -v atoms={{ atoms | length }} '
      FILENAME == ARGV[1] {
        if (/^CELL_PARAMETERS/) { block = "cell"; left = 3; fields = 3; part = $0 "\n"; next }
        if (/^ATOMIC_POSITIONS/) { block = "ions"; left = atoms; fields = 4; part = $0 "\n"; next }
        if (left > 0) { part = part $0 "\n"; if (NF < fields) left = 0; else if (--left == 0) whole[block] = part }
        next
      }
      /^CELL_PARAMETERS/ && "cell" in whole { printf "%s", whole["cell"]; skip = 4 }
      /^ATOMIC_POSITIONS/ && "ions" in whole { printf "%s", whole["ions"]; skip = atoms + 1 }
      skip > 0 { skip--; next }
      { print }
      END { exit !("ions" in whole) }
    ' <(whole_lines "pw-$k.out") pw.in >"pw-$n.in" && return
    cp pw.in "pw-$n.in"
  done
}

run_program() {
  {{ launch }} -in "pw-$n.in" >"pw-$n.out"
}

is_finished() {
  grep -q 'JOB DONE' "pw-$n.out" && ! grep -qE 'convergence NOT achieved|maximum number of steps has been reached' "pw-$n.out"
}

tidy_up() {
  rm -rf tmp
}
