"""What a person looks at: pages and widgets that draw a Snapshot, nothing else."""
