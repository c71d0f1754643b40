"""What is minimised: the single-site thermal state and the variational functionals built on it."""
