"""Mean-flow features and local frames; NumPy only, so that a receiver can run them."""
