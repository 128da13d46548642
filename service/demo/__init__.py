"""The demo plant: an invented milk drying plant with raw test data, and the job walked through on it."""
