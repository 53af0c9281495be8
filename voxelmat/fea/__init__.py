"""Linear elasticity on a voxel grid: element, matrix-free solver, loads, statics, gradients."""
