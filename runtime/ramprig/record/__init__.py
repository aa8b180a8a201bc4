"""The run folder: samples as CSV, events, the manifest `run.json`, and the account of every sample."""
