"""How fast is the program, beside what anyone would otherwise write: `python -m tests.benchmarks`."""
