# CP2K writes the input of the next attempt itself, with the cell and the ions of the last step; steps are counted anew
make_inputs() {
  if [ "$n" -gt 1 ] && grep -q '&END FORCE_EVAL' strainkit-1.restart 2>/dev/null; then
    sed '/STEP_START_VAL/d' strainkit-1.restart >"cp2k-$n.inp"
  else
    cp cp2k.inp "cp2k-$n.inp"
  fi
}

run_program() {
  {{ launch }} -i "cp2k-$n.inp" -o "cp2k-$n.out"
}

is_finished() {
  grep -q 'PROGRAM ENDED AT' "cp2k-$n.out" && ! grep -q 'SCF run NOT converged' "cp2k-$n.out"
{%- if task != "single" %} &&
    grep -q 'OPTIMIZATION COMPLETED' "cp2k-$n.out"
{%- endif %}

}

tidy_up() {
  rm -f strainkit-RESTART* ./*.bak-*
}
