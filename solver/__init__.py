"""Sizing a skeleton to a person and posing it in every frame."""
