"""Solution -> uncertainty: covariances, redundancy, noise components, datum, trust."""
