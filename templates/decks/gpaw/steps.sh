make_inputs() { :; } # the script itself looks for the last step of the last attempt

run_program() {
  {{ launch }} gpaw_job.py "$n"
}

is_finished() {
  grep -q 'converged=T' returned.extxyz
}

tidy_up() { :; }
