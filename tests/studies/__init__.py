"""Studies: many simulated nights, on request. `python -m tests.studies NAME [--nights N] [--json PATH]`."""
