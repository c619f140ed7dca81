"""Verdicts against limits, and the choice of bias and load."""
