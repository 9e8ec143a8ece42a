"""What a clinic sees: schedules, the body's irregularity and assay error, and detection in the sampled series."""
