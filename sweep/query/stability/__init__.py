"""Where the loop is stable along an axis or in a plane: crossings found between nodes."""
