"""Drivers: what a device must offer, and the families that offer it."""
