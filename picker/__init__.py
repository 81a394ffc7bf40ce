"""Records to onsets with errors."""
