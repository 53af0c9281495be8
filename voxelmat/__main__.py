"""`python -m voxelmat` is the shell command `voxelmat`."""

from voxelmat.cli import main

raise SystemExit(main())
