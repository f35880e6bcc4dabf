"""Raw frames: readers, geometry, inventory and stacks."""
