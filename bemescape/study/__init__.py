"""Many shapes in one go: which cases a study has, solving them on several processes, and what they say together."""
