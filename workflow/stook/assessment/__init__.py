"""The assessment file: schema, loading, simulations, check."""
