"""Results to text and page."""
