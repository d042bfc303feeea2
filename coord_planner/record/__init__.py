"""Runs to and from files, their figures and their pages."""
