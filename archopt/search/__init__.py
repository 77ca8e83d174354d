"""The genetic loop, completion of rails, local search and the archive; plain data only."""
