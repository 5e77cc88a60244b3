"""What a run shows: a dashboard in a terminal, plain lines elsewhere. It looks at snapshots and touches nothing."""
