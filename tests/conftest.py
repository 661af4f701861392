"""Puts this folder on the path, so that tests import the helpers beside it."""
