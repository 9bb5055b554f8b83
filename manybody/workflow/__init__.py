"""From a workflow file to finished points."""
