"""What is asked in a window of its own."""
