"""The common objects of the contract: model, market, dates, slice; as schemas and as what the engine takes."""
