"""Speed and memory of hazard fits beside general-purpose GLM libraries: ``python -m tests.benchmarks fit``."""
