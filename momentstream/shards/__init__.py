"""Parts from many places: combining them, and files that survive a crash."""
