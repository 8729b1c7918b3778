"""The resource /v1/chains: option chains turned into quoted surfaces."""
