"""What is drawn in 3-D, testable off screen."""
