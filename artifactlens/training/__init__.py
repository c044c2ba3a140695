"""Making the model: never imported by the pipeline."""
