"""Pages and figures."""
