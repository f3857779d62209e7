"""Arrays and tables to text and pictures, as bytes."""
