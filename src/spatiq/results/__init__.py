"""What is kept: HDF5, tables, SigMF annotations."""
