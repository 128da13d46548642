"""The service around the computation: HTTP, storage, access and the command line."""
