"""What is done on the bench: one scripted procedure a file, and the command line."""
