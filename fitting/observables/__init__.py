"""What the model predicts for a reading."""
