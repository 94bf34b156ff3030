"""What leaves the program about a run: exports now, reports later."""
