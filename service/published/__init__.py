"""Published worked examples and tables as data, and what this program computes for them."""
