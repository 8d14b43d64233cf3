# an attempt begins with the ions (and, in a variable-cell run, the cell) where the last one stopped
make_inputs() {
  local k
  cp pw.in "pw-$n.in"
  for ((k = n - 1; k > 0; k--)); do
    [ -f "pw-$k.out" ] || continue
    awk -v atoms={{ atoms | length }} '
      NR == FNR {
        if (/^CELL_PARAMETERS/) { block = "cell"; left = 4 }
        if (/^ATOMIC_POSITIONS/) { block = "ions"; left = atoms + 1 }
        if (left > 0) { part = part $0 "\n"; if (--left == 0) { whole[block] = part; part = "" } }
        next
      }
      /^CELL_PARAMETERS/ && "cell" in whole { printf "%s", whole["cell"]; skip = 4 }
      /^ATOMIC_POSITIONS/ && "ions" in whole { printf "%s", whole["ions"]; skip = atoms + 1 }
      skip > 0 { skip--; next }
      { print }
      END { exit !("ions" in whole) }
    ' "pw-$k.out" pw.in >"pw-$n.in" && return
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
