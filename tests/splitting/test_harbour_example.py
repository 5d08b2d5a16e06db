"""The harbour's weak call: buried by the bare DFT, clear after a proper bank."""

import importlib.util
import pathlib

EXAMPLE = pathlib.Path(__file__).parents[2] / "examples" / "harbour.py"


def test_the_harbour_example(tmp_path, capsys):
    spec = importlib.util.spec_from_file_location("harbour", EXAMPLE)
    harbour = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(harbour)
    ratios = harbour.main(["--folder", str(tmp_path), "--seconds", "1"])
    # The carrier is 25 dB above the noise of its channel; narrow-band modulation keeps about
    # that (common practice, no source). The neighbour is 60 dB stronger, and the bare DFT takes
    # off some 32 dB of it (its mean power in the skiff's channel), so the call is 28 dB below it.
    assert ratios["Kaiser"] > 18
    assert ratios["bare DFT"] < -20
    assert (tmp_path / "harbour.png").read_bytes().startswith(b"\x89PNG")
    shown = capsys.readouterr().out
    assert "4 of 192 channels look busy" in shown
    names = [path.name for path in (tmp_path / "active").glob("*.sigmf-meta")]
    assert sorted(names) == [
        "channel_050_159250000Hz.sigmf-meta",
        "channel_138_156650000Hz.sigmf-meta",
        "channel_139_156675000Hz.sigmf-meta",
        "channel_156_157100000Hz.sigmf-meta",
    ]
