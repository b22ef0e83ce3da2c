"""From chamber trials to what they say of an animal: reading, sensor offset, supply capacity, temperature response."""
