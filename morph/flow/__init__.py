"""Flow through the channels: the network, its laws of loss, and what they say about an insert."""
