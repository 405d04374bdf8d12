"""After a run: one page and pictures that show what happened."""
