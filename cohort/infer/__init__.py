"""What can be said from a sample, and how surely. Knows arrays and names, never bodies."""
