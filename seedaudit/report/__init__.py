"""From a result to what a person reads and prints."""
