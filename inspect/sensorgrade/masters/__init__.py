"""From stacks of raw frames, read once, to master frames."""
