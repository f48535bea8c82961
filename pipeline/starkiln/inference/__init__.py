"""Log-posterior, sampling, convergence and summaries of many stars at once."""
