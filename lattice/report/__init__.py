"""Reports as one HTML page or as Markdown, from the same parts."""
