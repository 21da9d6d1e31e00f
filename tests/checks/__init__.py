"""What is held against published values."""
