"""The page of devices is made from the devices."""

from device_tables import PAGE, TABLE, table, with_tables

from loopsim.devices.catalogue import DEVICES, field_specs

# the same fields as its partner, listed once
MIRRORED = {"bipolar_pnp": "bipolar_npn", "mosfet_p": "mosfet_n"}


def test_the_tables_are_those_of_the_catalogue():
    text = PAGE.read_text(encoding="utf-8")
    assert text == with_tables(text), "write them anew: python tests/device_tables.py"


def test_every_device_and_waveform_is_on_the_page():
    text = PAGE.read_text(encoding="utf-8")
    shown = {match[2] for match in TABLE.finditer(text)}
    assert shown == (set(DEVICES) - set(MIRRORED)) | {"sine", "square", "ramp"}
    for one, other in MIRRORED.items():
        assert table(one) == table(other)
        assert f"`{one}`" in text


def test_every_field_has_a_help_a_range_and_a_default_within_it():
    for device in DEVICES:
        for spec in field_specs(device).values():
            assert spec.help
            if spec.form in ("number", "source"):
                assert spec.low is not None
                assert spec.high is not None
                assert spec.low < spec.high
                if isinstance(spec.default, float):
                    assert spec.low <= spec.default <= spec.high
            if spec.words:
                assert spec.default in spec.words
