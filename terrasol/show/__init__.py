"""What lets a person look rather than read."""
