"""The stack layer of ramulus."""
