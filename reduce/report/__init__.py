"""What a person looks at: plots and the summary."""
