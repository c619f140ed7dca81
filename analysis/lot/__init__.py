"""Devices and lots: how single verdicts add up."""
