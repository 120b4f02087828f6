"""Evidence on disk: the folder that each run leaves."""
