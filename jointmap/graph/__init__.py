"""Survey -> Problem: keyframes, odometry, measurement blocks, start values, noise terms."""
