"""How the permutation tests compute; they are declared in `permutation_tests`."""
