"""Screens: read-only views of parts, results and stacks in a notebook."""
