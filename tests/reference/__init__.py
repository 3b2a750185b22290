"""Makers of exact or published values that the tests compare with; none is the project's own."""
