"""What a run found: rows of units on disk, the summary made of them, and its words."""
