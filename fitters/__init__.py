"""Process models, their exact response to a logged output, and their estimation from it."""
