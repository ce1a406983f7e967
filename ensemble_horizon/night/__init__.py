"""The stages of a night strung together: survey, estimate, products."""
