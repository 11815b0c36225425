"""What names outlying rows and the look of values: limits, running windows, rounding grids."""
