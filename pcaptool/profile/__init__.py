"""Profiles: TOML to checked model, JSON Schema, worked examples."""

from pcaptool.profile.checks import conflicts
from pcaptool.profile.examples import check_profile
from pcaptool.profile.fields import decode_fields, encode_fields, fields_of, message_bits
from pcaptool.profile.load import load_profile, parse_profile, shipped_profiles
from pcaptool.profile.model import Field, Profile, WrapperField, bit_positions

__all__ = [
    "Field", "Profile", "WrapperField", "bit_positions", "check_profile", "conflicts", "decode_fields",
    "encode_fields", "fields_of", "load_profile", "message_bits", "parse_profile", "shipped_profiles",
]
