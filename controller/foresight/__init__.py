"""What a run will be like, what it would have been like, and whether it goes as expected."""
