"""View model, figures and the self-contained report."""
