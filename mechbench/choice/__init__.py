"""The choice: evidence for every rule, the decision, and its words."""
