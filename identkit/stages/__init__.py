"""The stages of a study: labelled data in, labelled data out, no mathematics."""
