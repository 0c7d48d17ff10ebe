"""What an instrument is: protocols, typed errors, the bench's settings, and time."""
