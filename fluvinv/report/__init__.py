"""What people look at: figures and the summary in words."""
