"""The resource /v1/implied-vols: prices turned into volatilities."""
