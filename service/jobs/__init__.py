"""Durable jobs: submitted over HTTP, kept in a store, run by worker processes, whatever dies meanwhile."""
