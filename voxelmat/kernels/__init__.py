"""Every compiled loop: arrays in, arrays out, nothing of voxelmat known."""
