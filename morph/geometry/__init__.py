"""Records of shape (meshes, curves, triangle trees) and the front of the kernels."""
