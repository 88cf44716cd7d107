"""Choosing the dimensions: the routes from wanted behaviour to a design."""
