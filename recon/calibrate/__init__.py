"""What is measured and not assumed: estimators with standard errors, and their report."""
