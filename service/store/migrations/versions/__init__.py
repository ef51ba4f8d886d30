"""One module for each revision, in order."""
