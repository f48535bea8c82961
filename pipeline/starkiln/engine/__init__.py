"""Planning, parts, ledger, generations and the cluster."""
