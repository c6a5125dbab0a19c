"""Rows and arrays in; text, HTML, plots and tables out.  Knows nothing of accumulators."""
