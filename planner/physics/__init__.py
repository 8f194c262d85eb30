"""The physics underneath: atoms, lattice, interferometer phase and noise. Pure functions of SI numbers and arrays."""
