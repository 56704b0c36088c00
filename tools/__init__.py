"""What helps people work on the project: test benches, sample makers, studies, set-up scripts."""
