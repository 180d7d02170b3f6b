"""Window and plots; the only place that draws."""
