"""One file per form of uncertainty set."""
