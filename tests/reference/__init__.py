"""Slow mechanics that share no code with the product: references for the tests."""
