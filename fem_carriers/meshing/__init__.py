"""Description or file to mesh: named surfaces and volumes, grading, refinement that keeps names, the mesh check-up."""
