# an attempt begins where the last one stopped; the files of the last one get its number
make_inputs() {
  local file
  for file in OUTCAR vasprun.xml CONTCAR OSZICAR; do
    [ -f "$file" ] && mv "$file" "$file-$((n - 1))"
  done
  [ -f POSCAR-1 ] || cp POSCAR POSCAR-1
  if [ -s "CONTCAR-$((n - 1))" ]; then cp "CONTCAR-$((n - 1))" POSCAR; else cp POSCAR-1 POSCAR; fi
  cat {% for run in species_runs %}{{ (pseudopotential_folder ~ "/" ~ run.pseudopotential ~ "/POTCAR") | shell }} {% endfor %}>POTCAR
}

run_program() {
  {{ launch }} >"vasp-$n.out"
}

is_finished() {
  grep -q 'General timing and accounting' OUTCAR &&
    grep -qE '{{ "reached required accuracy" if task != "single" else "aborting loop because EDIFF is reached" }}' OUTCAR "vasp-$n.out"
}

tidy_up() {
  rm -f POTCAR CHG CHGCAR WAVECAR PROCAR DOSCAR EIGENVAL IBZKPT PCDAT XDATCAR REPORT
}
