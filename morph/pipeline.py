"""The recipe: calls the stages in order and owns no geometry."""
