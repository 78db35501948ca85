"""Results become files and pages."""
