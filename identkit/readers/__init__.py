"""One file per kind of source; all return the same responses dataset."""
