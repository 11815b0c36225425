"""What differs between the levels of a label, by how much and where."""
