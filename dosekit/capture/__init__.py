"""What happens at rest: which nucleus captures, what the star emits, how star products carry energy away."""
