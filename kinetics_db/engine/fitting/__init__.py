"""Global fits of one network to many experiments."""
