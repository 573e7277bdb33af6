"""From data files to a plane: readers, gridding and the flow state at each point."""
