"""Study designs: pure evaluations of test data, and the one structure in which they give their result."""
