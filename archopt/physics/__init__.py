"""Ground floor: pure functions on numpy arrays, SI units, one topic a module."""
