"""One file a revision, oldest first."""
