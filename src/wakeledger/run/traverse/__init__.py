"""What a traverse of hole pressures is turned into before the chain, and what it says of itself."""
