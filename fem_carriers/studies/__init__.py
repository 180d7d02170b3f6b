"""Many solves: inputs by path, sweeps over them on all cores, and the best point of a sweep."""
