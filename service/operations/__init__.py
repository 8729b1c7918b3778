"""What whoever runs the service needs: probes and metrics."""
