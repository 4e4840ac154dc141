"""The limits, the budget they make, remedies and the verdict."""
