# has a POSCAR its lattice and all its atoms, to the end of the last line?
is_whole() {
  [ -s "$1" ] && [ -z "$(tail -c 1 "$1")" ] &&
    awk -v atoms={{ atoms | length }} '
      NR >= 3 && NR <= 5 && NF >= 3 { vectors++ }
      first && NR > first && NR <= first + atoms && NF >= 3 { found++ }
      NR >= 7 && !first && /^ *[DdCcKk]/ { first = NR }
      END { exit !(vectors == 3 && found == atoms) }
    ' "$1"
}

# an attempt begins where the last one that moved stopped; the files of the last one get its number
make_inputs() {
  local file k
  for file in OUTCAR vasprun.xml CONTCAR OSZICAR; do
    [ -f "$file" ] && mv "$file" "$file-$((n - 1))"
  done
  if [ ! -f POSCAR-1 ]; then
    cp POSCAR POSCAR-new && mv POSCAR-new POSCAR-1 || return
  fi
  for ((k = n - 1; k > 0; k--)); do
    if is_whole "CONTCAR-$k"; then break; fi
  done
  if [ "$k" -gt 0 ]; then cp "CONTCAR-$k" POSCAR; else cp POSCAR-1 POSCAR; fi
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
