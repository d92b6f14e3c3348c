"""The verdict on single designs, line by line, and how far each is from trouble."""
