"""A finished ledger in, pictures and text out."""
