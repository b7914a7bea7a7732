"""Digital phantoms of known truth, scanned by a model of an MR scanner."""
