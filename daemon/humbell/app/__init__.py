"""The one place that knows all stages: wiring, tasks and signals."""
