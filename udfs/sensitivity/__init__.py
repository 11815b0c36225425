"""Whether a finding survives: rows taken away, other reasonable choices."""
