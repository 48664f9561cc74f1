"""Published algorithms on plain arrays; one file per method, no labels, no files."""
