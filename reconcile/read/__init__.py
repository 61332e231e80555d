"""A file becomes plain cells or arrays, each with its place; no physics."""
