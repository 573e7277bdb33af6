"""What is reported, held against each other, and kept."""
