"""Many devices: the engine that runs them and the ledger that keeps them."""
