"""Answers about a stage: response, corners, what the running computation makes of them."""
