"""Fields, and things carried through a map."""

from volmap.carry.bodies import moved_body
from volmap.carry.by_field import carry_by_field
from volmap.carry.direction_proof import DirectionProof, direction_proof, field_mistake, grid_mistake
from volmap.carry.fields import backward_field, carried_solid, forward_field, volume_ratio_image
from volmap.carry.lines import with_bends
from volmap.carry.loop_error import LoopError, loop_error
from volmap.carry.measured import carried_quantity
from volmap.carry.points import MovedPoints, carried_values, gradients_at, move_points
from volmap.carry.rules import Factors, apply_rule, rule_factors
from volmap.carry.sampling import FieldError, RoundTrip, field_error, round_trip, sample_field
from volmap.carry.settings import AS_USUAL, CarrySettings
from volmap.carry.sidecar import check_point, field_sidecar
from volmap.carry.strain import Strain, strain_of
from volmap.carry.things import Carried, carry

__all__ = [
    "AS_USUAL",
    "Carried",
    "CarrySettings",
    "DirectionProof",
    "Factors",
    "FieldError",
    "LoopError",
    "MovedPoints",
    "RoundTrip",
    "Strain",
    "apply_rule",
    "backward_field",
    "carried_quantity",
    "carried_solid",
    "carried_values",
    "carry",
    "carry_by_field",
    "check_point",
    "direction_proof",
    "field_error",
    "field_mistake",
    "field_sidecar",
    "forward_field",
    "gradients_at",
    "grid_mistake",
    "loop_error",
    "move_points",
    "moved_body",
    "round_trip",
    "rule_factors",
    "sample_field",
    "strain_of",
    "volume_ratio_image",
    "with_bends",
]
