"""The solid stage: swept field, closed extraction, and the insert cut from its blank."""
