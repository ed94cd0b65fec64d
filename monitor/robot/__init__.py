"""What the machine is: URDF, tree, pseudo-inertias, arrays in kernel order."""
