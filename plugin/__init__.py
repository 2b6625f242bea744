"""What meets the host application."""
