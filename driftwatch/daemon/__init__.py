"""What drives the pipeline: the live run, the replay and the keeper that commits before it publishes."""
