"""What a loop consists of, because every proof has to know all of it."""

from dataclasses import fields

from roa.loop.model import Loop, Parameter

PROVERS = "level_proof, level_set_proof, norm_bound, ring_proof, invariance_proof in roa/bound and basin/certificate.py"


def test_whoever_adds_to_the_loop_has_looked_at_the_proofs():
    # What moves a loop, or what it must not touch, and is unknown to a prover would make its proofs false.
    known = {
        "title", "states", "units", "parameters", "signals", "dynamics", "domain", "guess", "tables", "hold",
        "disturbances", "limits",
    }  # fmt: skip
    assert {field.name for field in fields(Loop)} == known, f"see that these know the new field: {PROVERS}"
    assert {field.name for field in fields(Parameter)} == {"value", "unit"}, f"see that these know it: {PROVERS}"
