"""The checks: every way an insert fails in the shop, as verdicts."""
