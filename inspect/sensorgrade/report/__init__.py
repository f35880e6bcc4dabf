"""Pages and plots."""
