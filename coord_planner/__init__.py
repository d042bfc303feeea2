"""Coordinated motion planning for several ground robots that turn together."""

__version__ = "0.1.0"
