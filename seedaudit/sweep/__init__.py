"""One pass over the data: from runs to the one mergeable state."""
