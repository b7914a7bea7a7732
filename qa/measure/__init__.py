"""One module a quantity: pure functions from an acquisition, a pose and a phantom to measurements."""
