"""Small gmsh models and job files, all invented; each one runs in a test."""
