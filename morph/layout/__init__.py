"""The layout stage: density image to channel graph."""
