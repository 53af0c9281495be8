"""Unknowns, filters, responses and optimisers for material layout."""
