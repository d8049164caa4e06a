"""The files other programs read: STL, 3MF, STEP centrelines and tables."""
