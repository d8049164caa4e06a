"""The body stage: blank, faces, holes, room for bores, leads; gives the channel plan."""
