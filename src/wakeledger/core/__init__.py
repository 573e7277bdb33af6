"""The vocabulary that every room shares."""
