"""Problem, weak forms, assembly, solvers, terminal functionals, adjoint: a description on a mesh to a solved state."""
