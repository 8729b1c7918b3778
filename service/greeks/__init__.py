"""The resource /v1/greeks: smiles with their derivatives."""
