"""The words of the job, and what a person hands in: no numerics, no drawing."""
