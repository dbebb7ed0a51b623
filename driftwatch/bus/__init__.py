"""The wire's encoding and the publisher."""
