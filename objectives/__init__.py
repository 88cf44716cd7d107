"""What is asked of a set of modes: values, derivatives, requirements. Imports numpy, nothing of ours."""
