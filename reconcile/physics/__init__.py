"""The reduced model: pure functions of floats and arrays, SI only; imports nothing of ours."""
