"""Where steps settle, as ``afterkick check`` shows it."""

from cli.shared import design_text, json_of, lag_with, ratio, run, write

COARSE = '[signals]\ninput = { unit = "V", full_scale = 1, peak = 0.5 }\noutput = { unit = "V", full_scale = 1 }'


def test_text_and_json_tell_the_same_of_every_step(tmp_path):
    # the lag's time constant is 20 samples, and its dead band half of that
    path = write(tmp_path, lag_with(COARSE))
    text = run("check", path).stdout
    data = json_of(run("check", "--json", path))["bounds"]
    steps = data["settled"]
    assert [step["input_code"] for step in steps] == [16384, 8192, 2048, 256, 1, -16384]
    for step in steps:
        low, high = step["offset_bound"]
        assert low <= step["offset_simulated"][0] <= step["offset_simulated"][1] <= high
        assert step["gain_times_input"] == step["input_code"]
        assert step["from_coefficients"] == 0
        assert step["period"] == 1
    largest = max(abs(limit) for step in steps for limit in step["offset_bound"])
    assert largest == data["dead_band_counts"] > 5
    assert f"a step settles within {largest:.4g} counts of DC gain times input, which is exact" in text
    lowest = min(step["offset_simulated"][0] for step in steps)
    highest = max(step["offset_simulated"][1] for step in steps)
    assert f"simulated, 6 steps from 1 to 16384 counts: {lowest:.4g} to {highest:.4g} counts\n" in text


def test_nothing_is_said_where_nothing_is_proved_or_the_filter_integrates(tmp_path):
    too_small = lag_with('[signals]\ninput = { unit = "V", full_scale = 1 }\noutput = { unit = "V", full_scale = 0.5 }')
    for text in (too_small, design_text(ratio([1], [1, 0]), more=COARSE)):
        path = write(tmp_path, text)
        assert json_of(run("check", "--json", path))["bounds"]["settled"] == []
        assert "settles" not in run("check", path).stdout
