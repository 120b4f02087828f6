"""Device laws behind one interface."""
