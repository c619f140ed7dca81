"""Capacitance against reverse bias, and the speed that follows from it."""
