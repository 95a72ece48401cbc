"""Templates, style sheets and scripts of the report."""
