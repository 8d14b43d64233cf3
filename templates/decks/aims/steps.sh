# has a geometry all its lattice vectors and atoms, to the end of the last line?
is_whole() {
  [ -s "$1" ] && [ -z "$(tail -c 1 "$1")" ] &&
    awk -v atoms={{ atoms | length }} '
      $1 == "lattice_vector" && NF >= 4 { vectors++ }
      ($1 == "atom" || $1 == "atom_frac") && NF >= 5 { found++ }
      END { exit !(vectors == 3 && found == atoms) }
    ' "$1"
}

# an attempt begins where the last one stopped
make_inputs() {
  if [ ! -f geometry.in-1 ]; then
    cp geometry.in geometry.in-new && mv geometry.in-new geometry.in-1 || return
  fi
  if is_whole geometry.in.next_step; then
    cp geometry.in.next_step geometry.in
  elif ! is_whole geometry.in; then
    cp geometry.in-1 geometry.in
  fi
  cat control.head {% for kind in species %}{{ (pseudopotential_folder ~ "/" ~ kind.pseudopotential) | shell }} {% endfor %}>control.in
}

run_program() {
  {{ launch }} >"aims-$n.out"
}

is_finished() {
  grep -q 'Have a nice day' "aims-$n.out" && ! grep -q 'Self-consistency cycle not converged' "aims-$n.out"
{%- if task != "single" %} &&
    grep -qE 'Present geometry is converged' "aims-$n.out"
{%- endif %}

}

tidy_up() {
  rm -f hessian.aims
}
