"""Readers and writers of open formats: the edge of the pipeline, where files become tables and tables files."""
