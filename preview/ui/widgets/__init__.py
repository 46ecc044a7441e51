"""Small own widgets of the desk."""
