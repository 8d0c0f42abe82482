"""Physics as pure functions of arrays, SI in and out."""
