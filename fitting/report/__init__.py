"""From results to files a person or a script reads."""
