"""What materials do: hardness, conditions of use, tables."""
