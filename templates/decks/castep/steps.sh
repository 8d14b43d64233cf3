# an attempt begins from the last whole frame of the last one's .geom file (lattice and positions in bohr){% if magnetic %}; the spins
# are not in there, so a magnetic crystal begins anew{% endif %}

make_inputs() {
  local k
  cp castep.param "castep-$n.param"
  cp castep.cell "castep-$n.cell"
{% if not magnetic %}
  for ((k = n - 1; k > 0; k--)); do
    [ -s "castep-$k.geom" ] || continue
    awk -v atoms={{ atoms | length }} '
      FILENAME == ARGV[1] {
        if (/<-- h$/) { if (rows == 3) { rows = 0; lattice = ""; positions = ""; count = 0 } lattice = lattice $1 " " $2 " " $3 "\n"; rows++ }
        if (/<-- R$/) { positions = positions $1 " " $3 " " $4 " " $5 "\n"; if (++count == atoms) { cell = lattice; ions = positions } }
        next
      }
      ions != "" && /^%BLOCK LATTICE_CART/ { printf "%%BLOCK LATTICE_CART\nbohr\n%s", cell; skip = 1 }
      ions != "" && /^%BLOCK POSITIONS_FRAC/ { printf "%%BLOCK POSITIONS_ABS\nbohr\n%s%%ENDBLOCK POSITIONS_ABS\n", ions; skip = 2 }
      skip && /^%ENDBLOCK/ { if (skip == 1) print; skip = 0; next }
      !skip { print }
      END { exit ions == "" }
    ' "castep-$k.geom" castep.cell >"castep-$n.cell" && return
    cp castep.cell "castep-$n.cell"
  done
{% endif %}
}

run_program() {
  {{ launch }} "castep-$n"
}

is_finished() {
  grep -q 'Total time *=' "castep-$n.castep" &&
    ! grep -qE 'has not converged|system has not reached|Geometry optimization failed to converge' "castep-$n.castep"
}

tidy_up() {
  rm -f castep-*.check castep-*.castep_bin castep-*.cst_esp castep-*.bands castep-*.bib
}
