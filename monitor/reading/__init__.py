"""Plain text in, plain values and their places out, checked against models. Knows no rule and no setting."""
