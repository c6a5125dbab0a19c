"""What is read off moments: the shared statistics, and the immutable summary."""
