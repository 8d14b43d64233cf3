# an attempt begins where the last one stopped
make_inputs() {
  [ -f geometry.in-1 ] || cp geometry.in geometry.in-1
  if [ -s geometry.in.next_step ]; then cp geometry.in.next_step geometry.in; fi
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
