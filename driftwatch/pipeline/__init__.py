"""The one deterministic pipeline that serves the live daemon and the replay."""
