"""The integrators held to the truth: accuracy and cost of methods, equations and cases."""
