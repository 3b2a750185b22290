"""TEMP."""
