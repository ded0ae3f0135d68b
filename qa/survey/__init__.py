"""What needs several lines at once."""
