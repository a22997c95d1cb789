"""The ways out: the metrics page, its HTTP server, and the writers of `monitord replay`."""
