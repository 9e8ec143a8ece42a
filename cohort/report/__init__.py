"""Tables, figures and words made from result files; reads nothing else."""
