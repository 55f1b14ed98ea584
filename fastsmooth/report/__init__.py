"""What people look at: the picture of a curve."""
