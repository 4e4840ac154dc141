"""What the data say: residuals, tails, moments, variance, dependence, geometry."""
