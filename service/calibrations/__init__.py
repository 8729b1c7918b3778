"""The resource /v1/calibrations: models fitted to surfaces, as durable jobs with a report to look at."""
