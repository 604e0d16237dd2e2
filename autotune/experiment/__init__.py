"""The guarded relay test as a pure machine: ``step(experiment, event) -> (experiment, commands)``."""
