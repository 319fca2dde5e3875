"""Season: weather indices over the growing season and its phases."""
