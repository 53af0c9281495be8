"""Load cases as arrays over the nodes; what depends on the design is refused."""
