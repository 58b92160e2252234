"""Published reference numbers, typed in with their sources; never our own earlier output."""
