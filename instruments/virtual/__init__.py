"""Instruments in software, behind real SCPI sockets on loopback."""
