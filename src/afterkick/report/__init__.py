"""What the road found, as text for the terminal and as JSON."""
