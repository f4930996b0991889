"""From merged moments to effects, test statistics and classes."""
