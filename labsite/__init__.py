"""Composition and platform. Importing this package imports nothing else: the bootstrap runs before Django is there."""
