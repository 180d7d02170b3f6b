"""Silicon models, recombination laws, absorption and spectrum: pure functions of numbers and arrays."""
