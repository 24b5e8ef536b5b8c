"""Independent evaluations of the dipole tensor that the tests compare latticedip with; they import nothing from it."""
