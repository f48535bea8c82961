"""Physics as pure functions of arrays."""
