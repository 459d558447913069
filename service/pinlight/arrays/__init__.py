"""Arrays: their files and their geometry."""
