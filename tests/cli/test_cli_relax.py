"""``relax = true`` through every command: what is reported, what is emitted, and what is refused."""

import pytest

from afterkick.starters import starter_text
from cli.shared import design_text, json_of, lag_with, ratio, refused, run, write

HEADER = "data_bits        = 16"


def asking(starter: str, *lines: str) -> str:
    """The starter with further lines in [arithmetic]."""
    text = starter_text(starter)
    assert text.count(HEADER) == 1
    return text.replace(HEADER, "\n".join([*lines, HEADER]))


RUDDER = asking("rudder", "relax = true", 'structure = "transposed"', "carry = 1")
TIGHT = lag_with(
    '[signals]\ninput = { unit = "V" }\noutput = { unit = "A", full_scale = 0.5 }\n[arithmetic]\nrelax = true'
)
"""The output of a lag of gain 1 reaches twice its full scale."""


def test_the_report_says_what_was_saved_and_what_stays(tmp_path):
    result = run("check", write(tmp_path, RUDDER))
    assert result.exit_code == 0
    lines = result.stdout.splitlines()
    first = next(k for k, line in enumerate(lines) if line.startswith("  relaxed"))
    text = " ".join(line[12:] for line in lines[first : first + 4])
    assert text.startswith(
        "81 operations instead of 115 (estimate): no saturation of v1, v2 and y; 32-bit sums for v2, "
    )
    assert (
        "; error feedback in a coefficient of v2 and y stays: 64-bit sums for v1 and s1a; error feedback of v1" in text
    )
    assert "  relaxed" not in run("check", write(tmp_path, starter_text("rudder"))).stdout


def test_json_carries_the_proof(tmp_path):
    data = json_of(run("check", "--json", write(tmp_path, RUDDER)))
    found = data["fixed"]["relaxed"]
    assert found["operations"] == {"before": 115, "after": 81}
    assert found["unchecked"] == ["v1", "v2", "y"]
    assert found["folded"] == ["v2", "y"]
    assert found["stays"]["carried"] == ["v1"]
    peak = data["bounds"]["peak_code"]
    assert found["input_codes"] == [-peak, min(peak, 32767)]
    # the bounds, computed anew from the relaxed steps, agree with the ranges, up to what the carried sums add
    bounds = {word["word"]: word for word in data["bounds"]["words"]}
    assert [entry["word"] for entry in found["ranges"]] == list(bounds)
    for entry in found["ranges"]:
        word = bounds[entry["word"]]
        assert word["capacity"][0] <= entry["lowest"] <= 0 <= entry["highest"] <= word["capacity"][1]
        assert entry["highest"] == pytest.approx(word["highest"], rel=1e-3)
    plain = json_of(run("check", "--json", write(tmp_path, starter_text("rudder"))))
    assert plain["fixed"]["relaxed"] is None


def test_everything_else_of_the_report_is_the_same(tmp_path):
    """The same integers: no figure may move but the cost and the ranges of words that are new."""
    relaxed, plain = (
        json_of(run("check", "--json", write(tmp_path, text))) for text in (RUDDER, RUDDER.replace("relax = true", ""))
    )
    for part in ("model", "sampling", "errors", "verdict", "budget"):
        assert relaxed[part] == plain[part]
    assert relaxed["fixed"]["sections"] == plain["fixed"]["sections"]
    for figure in ("dead_band_counts", "peak_code", "proved"):
        assert relaxed["bounds"][figure] == plain["bounds"][figure]
    assert relaxed["bounds"]["noise_rms_estimate"] == pytest.approx(plain["bounds"]["noise_rms_estimate"], rel=1e-9)
    assert relaxed["bounds"]["output_counts"] == pytest.approx(plain["bounds"]["output_counts"], rel=1e-9)


def test_kick_gives_the_same_counts(tmp_path):
    relaxed, plain = (
        json_of(run("kick", "--json", "--samples", "200", write(tmp_path, text)))
        for text in (RUDDER, RUDDER.replace("relax = true", ""))
    )
    assert relaxed == plain


def test_auto_compares_the_costs_of_relaxed_programs(tmp_path):
    data = json_of(run("check", "--json", write(tmp_path, asking("rudder", "relax = true", 'structure = "auto"'))))
    costs = [one["operations"] for one in data["fixed"]["tried"] if one["operations"] is not None]
    assert costs == sorted(costs)
    (taken,) = [one for one in data["fixed"]["tried"] if one["taken"]]
    assert taken["operations"] == data["fixed"]["relaxed"]["operations"]["after"] == costs[0]
    plain = json_of(run("check", "--json", write(tmp_path, asking("rudder", 'structure = "auto"'))))
    (other,) = [one for one in plain["fixed"]["tried"] if one["taken"]]
    assert taken["operations"] < other["operations"]


@pytest.mark.parametrize("command", ["check", "kick", "emit"])
def test_words_that_may_overflow_are_refused(command, tmp_path):
    path = write(tmp_path, TIGHT)
    output = ["-o", str(tmp_path / "out")] if command == "emit" else []
    (message,) = refused(run(command, path, *output)).splitlines()
    assert message.startswith(f"{path}: arithmetic.relax: nothing can be relaxed, as words may overflow: y (up to 200.")
    assert message.endswith("remedy: an output full_scale of 1.001 A or more, or a smaller peak; or relax = false")
    assert not (tmp_path / "out").exists()
    cured = TIGHT.replace("full_scale = 0.5", "full_scale = 1.001")
    assert run(command, write(tmp_path, cured), *output).exit_code == 0


def test_auto_takes_a_structure_that_can_be_relaxed_and_names_the_others(tmp_path):
    """A notch whose output may overflow: where the states are words of their own, those at least are proved."""
    text = 'kind = "blocks"\n[[model.block]]\ntype = "notch"\ncenter_hz = 50\nquality = 5'
    more = '[signals]\ninput = {{ peak = 0.95 }}\n[arithmetic]\nrelax = true\nstructure = "{}"'
    assert "arithmetic.relax" in refused(run("check", write(tmp_path, design_text(text, more=more.format("direct")))))
    result = run("check", write(tmp_path, design_text(text, more=more.format("auto"))))
    assert "direct: refused: nothing can be relaxed" in result.stdout
    assert "stays: saturation of y" in result.stdout


def test_nothing_to_save_is_said_and_no_error(tmp_path):
    path = write(tmp_path, lag_with("[arithmetic]\nrelax = true"))
    result = run("check", path)
    assert result.exit_code == 0
    assert "\n  relaxed   nothing saved\n" in result.stdout
    found = json_of(run("check", "--json", path))["fixed"]["relaxed"]
    assert found["input_codes"] is None
    assert found["ranges"] == []
    assert found["operations"]["before"] == found["operations"]["after"]


def test_a_kick_beyond_the_promised_peak_is_refused(tmp_path):
    signals = '[signals]\ninput = { unit = "V", full_scale = 2, peak = 1.5 }\noutput = { full_scale = 4 }\n'
    plain = design_text(ratio([2500], [1, 40, 2500]), more=signals)
    relaxed = plain + "[arithmetic]\nrelax = true\n"
    path = write(tmp_path, relaxed)
    (message,) = refused(run("kick", path, "--amplitude", "1.6")).splitlines()
    assert ": --amplitude: 1.6; accepted: from one count (6.10352e-05) to the promised peak" in message
    assert "(1.5), in input units" in message
    at_peak = json_of(run("kick", "--json", path, "--amplitude", "1.5"))
    assert at_peak == json_of(run("kick", "--json", path))
    assert at_peak["amplitude_counts"] == 24576
    assert json_of(run("kick", "--json", write(tmp_path, plain), "--amplitude", "1.6"))["amplitude_counts"] == 26214


def test_emitted_files_carry_the_proof(tmp_path):
    path, out = write(tmp_path, RUDDER), tmp_path / "out"
    assert run("emit", path, "-o", str(out)).exit_code == 0
    header, source = ((out / name).read_text() for name in ("rudder.h", "rudder.c"))
    assert "CAUTION, relaxed" in header
    assert "CAUTION, relaxed" in source
    for entry in json_of(run("check", "--json", path))["fixed"]["relaxed"]["ranges"]:
        assert f"{entry['word']}: {entry['lowest']} to {entry['highest']}; the word holds" in header
    assert "clamp" not in source


def test_a_controller_with_a_preset_is_left_as_it_is(tmp_path):
    model = 'kind = "blocks"\n[[model.block]]\ntype = "pid"\nkp = 0.5\nki = 2'
    more = '[arithmetic]\nstructure = "parallel"\nclamp = [-1, 0.9]\nrelax = true'
    result = run("check", write(tmp_path, design_text(model, "bilinear", more=more)))
    assert result.exit_code == 0
    assert "\n  relaxed   nothing saved, as a preset may start the filter where no proof holds\n" in result.stdout
