"""From predicted columns to areas with their covariance: design, Poisson fit, refinement."""
