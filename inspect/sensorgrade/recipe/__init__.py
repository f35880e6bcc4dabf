"""A recipe: the device, its frames, the stages to run and the grades' limits."""
