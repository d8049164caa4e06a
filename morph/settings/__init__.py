"""The Job record tree and process profiles: read, validated, sliced for the stages."""
