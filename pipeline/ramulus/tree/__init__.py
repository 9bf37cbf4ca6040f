"""The tree layer of ramulus."""
