"""The nouns: grids, materials, blends, parts, regions, loads, designs and results."""
