"""The review layer of ramulus."""
