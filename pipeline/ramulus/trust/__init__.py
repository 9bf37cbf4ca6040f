"""The trust layer of ramulus."""
