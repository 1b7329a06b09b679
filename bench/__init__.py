"""Scripts that print what the tool costs and how well it measures, against baselines in the same run."""
