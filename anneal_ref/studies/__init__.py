"""The archive, the study file, and a study's verdict."""
