"""What goes out to other systems: the one HTTP client, and what is delivered by it."""
