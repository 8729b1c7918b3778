"""The resource /v1/smiles: models priced into smiles with error bounds."""
