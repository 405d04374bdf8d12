"""What the readers of files share: YAML with line numbers, forms, checks, wording, plugins."""
