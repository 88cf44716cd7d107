"""From a point in the space of dimensions to the rest position and the matrices there."""
