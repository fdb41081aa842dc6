"""How parts differ: spread tables, draws of units, and the part values they make."""
