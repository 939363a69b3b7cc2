"""Messages: what they say, and how they are sent."""
