"""The jobs: plain functions from checked inputs to results."""
