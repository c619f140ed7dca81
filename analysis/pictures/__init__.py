"""The edge of the analysis: plots and the report page."""
