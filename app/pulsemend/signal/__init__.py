"""Arrays in, arrays out: find, gaps, fills, filters, autocovariance. Knows no channel name and no file."""
