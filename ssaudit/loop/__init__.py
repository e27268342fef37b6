"""How the models are closed: gains, schedules, and the closing itself."""
