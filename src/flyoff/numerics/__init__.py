"""Arrays and symbols: spaces, traced tapes, batched linear algebra, streams, discretisation."""
