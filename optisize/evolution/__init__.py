"""The search: a genetic algorithm on arrays, its archive of non-dominated designs, its checkpoints."""
