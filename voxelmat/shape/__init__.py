"""Shapes: primitive meshes, checks and repairs, voxelisation, assemblies of bodies."""
