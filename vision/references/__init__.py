"""Scale references, one file a kind."""
