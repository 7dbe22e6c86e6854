"""Models of the circulation and recordings with known truth."""
