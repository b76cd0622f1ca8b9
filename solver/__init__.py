"""The solving room: needs numpy, scipy, h5py and a sparse solver; never gmsh, pyvista or a terminal."""
