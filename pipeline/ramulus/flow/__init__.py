"""The flow layer of ramulus."""
