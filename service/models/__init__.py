"""The resource /v1/models: what can be priced."""
