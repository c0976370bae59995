"""One dimension: the slowing-down solver, depth curves by component, the library over residual range."""
