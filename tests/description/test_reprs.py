"""What a description shows at the prompt: what was given, in a line."""

from scipy import stats

import inverse as inv


def test_a_stack_shows_its_parts_as_they_were_given():
    stack = inv.Stack(
        inv.Layer("Al", thickness=stats.uniform(40, 40), velocity=inv.Unknown("v", stats.norm(6.42, 0.1))),
        inv.Interface(compliance=stats.halfcauchy(scale=0.05), boundary_conductance=100.0),
        inv.Repeat(2, inv.Layer("W", thickness=5.0, density_ratio=8.3), inv.Layer("Al", thickness=3.0)),
        inv.Graded("Al", "W", thickness=3.0, slices=2),
        inv.Substrate("Si", orientation="100", conductivity=140.0),
        ambient="water",
    )
    assert repr(stack).splitlines() == [
        "Stack(",
        "    Layer('Al', thickness=uniform(40, 40), velocity=Unknown('v', norm(6.42, 0.1))),",
        "    Interface(boundary_conductance=100, compliance=halfcauchy(scale=0.05)),",
        "    Repeat(2, Layer('W', thickness=5, density_ratio=8.3), Layer('Al', thickness=3)),",
        "    Graded('Al', 'W', thickness=3, slices=2, name='Al-W'),",
        "    Substrate('Si', orientation='100', conductivity=140),",
        "    ambient='water',",
        ")",
    ]


def test_a_material_shows_what_it_holds_and_no_table_at_length():
    text = repr(inv.material("Al"))
    assert text.startswith(
        "Material('Al', density=2.7, velocity=6.42, n=IndexTable(8 values, 400 to 1064 nm), heat"
    )
    assert "None" not in text and len(text) < 500
    own = inv.Material("alloy", n={800: 3.1 + 4.0j}, dn_dstrain=(stats.norm(1, 0.1), 0.0))
    assert repr(own) == "Material('alloy', n={800: (3.1+4j)}, dn_dstrain=(norm(1, 0.1), 0))"
