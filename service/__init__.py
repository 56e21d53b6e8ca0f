"""Online: HTTP, access, the standing of each source, the store, metrics."""
