"""Where data lives: run, profile, count. Always read-only towards the user's data."""
