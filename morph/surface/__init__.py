"""The surface stage: the channel graph laid on a carrier at depth."""
