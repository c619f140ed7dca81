"""Talks to the bench over SCPI; knows nothing of models or limits."""
