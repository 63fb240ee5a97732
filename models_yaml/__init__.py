"""The models that ship with Condyle; each file names its sources. Licence: as the project."""
