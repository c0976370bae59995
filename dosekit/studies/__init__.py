"""The study file and the pipeline that runs it."""
