"""The same quantities as `distill.exact`, slowly and obviously; shares no code with it; floor 2."""
