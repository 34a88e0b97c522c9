"""What a person sees of a running service: it listens to what the service publishes and never reaches into it."""
