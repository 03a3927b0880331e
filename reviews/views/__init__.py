"""Pages of the reviews layer, one module for each place people work at. They translate HTTP and nothing else."""
