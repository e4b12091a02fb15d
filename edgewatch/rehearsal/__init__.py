"""A simulated wheel, stream and camera with exact ground truth."""
