"""What people look at: figures and tables."""
