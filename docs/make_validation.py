"""Makes explanation/validation.md: simulate, analyse, compare with the truth and with an ideal observer.

`python docs/make_validation.py RECORDS` keeps one file a simulated recording in the folder RECORDS and makes only those
that are missing; then it writes the page. `--only-write` makes none and takes what is there. `--only-comparisons`
leaves the rest of the page as it is and writes the section about recordings compared.
"""

from __future__ import annotations

import argparse
import json
import sys
from datetime import UTC, datetime
from pathlib import Path

import numpy as np

HERE = Path(__file__).parent
sys.path.insert(0, str(HERE.parent / "tests" / "recovery"))

import comparisons  # noqa: E402
import study  # noqa: E402
import summary  # noqa: E402
import two_conditions  # noqa: E402
from population import AXONS, Population, study_axons, study_pairs, summarise, summarise_pairs  # noqa: E402

import napari_boutonrelease  # noqa: E402

MOVIES = {
    "fast-pair": 16,
    "dim": 16,
    "mixed": 8,
    "crowded": 10,
    "crowded-silent": 8,
    "seldom": 6,
    "silent": 20,
    "equal-25ms": 8,
    "slow-decay": 8,
}
FIELDS = 10
CHANGE_BLOCKS = 2
PAGE = HERE / "explanation" / "validation.md"


def main() -> None:
    """Run the studies that are missing and write the page."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("records", type=Path, help="folder that keeps what was found of each simulated recording")
    parser.add_argument("--only-write", action="store_true", help="run nothing; take the records that are there")
    parser.add_argument("--only-comparisons", action="store_true", help="write one section: recordings compared")
    parser.add_argument("--note", default="", help="a sentence about these records, for the introduction")
    given = parser.parse_args()
    given.records.mkdir(parents=True, exist_ok=True)
    compared = _compared(given)
    if given.only_comparisons:
        _replace_section(compared)
        return
    movies, axons = {}, {}
    for name, (population, n_axons) in AXONS.items():
        axons[name] = (population, n_axons, _axons(name, population, n_axons, given))
    for name, count in MOVIES.items():
        seeds = range(1, count + 1)
        if given.only_write:
            seeds = [seed for seed in seeds if (given.records / f"{name}-{seed}.json").exists()]
        movies[name] = study.studied(name, seeds=seeds, folder=given.records, progress=_tell)
    PAGE.write_text(_page(movies, axons, compared=compared, note=given.note), encoding="utf-8")
    print(f"{PAGE} written")


def _axons(name: str, population: Population, n_axons: int, given: argparse.Namespace) -> dict[str, np.ndarray] | None:
    path = given.records / f"axons-{name}.json"
    if not path.exists():
        if given.only_write:
            return None
        found = study_axons(population, axons=n_axons, rng=np.random.default_rng(11))
        path.write_text(json.dumps({key: values.tolist() for key, values in found.items()}), encoding="utf-8")
        _tell(name, 11)
    return {key: np.array(values) for key, values in json.loads(path.read_text(encoding="utf-8")).items()}


def _compared(given: argparse.Namespace) -> str:
    """Return the section about recordings compared."""
    fields, blocks = range(1, FIELDS + 1), range(1, CHANGE_BLOCKS + 1)
    if given.only_write:
        fields = [seed for seed in fields if (given.records / f"conditions-{seed}.json").exists()]
        blocks = [
            block
            for block in blocks
            if all(comparisons.record_path(given.records, name, block).exists() for name in comparisons.SCENARIOS)
        ]
    parts = ["## Recordings compared\n\n" + _COMPARED]
    if fields:
        parts.append(_two_conditions(two_conditions.studied_fields(seeds=fields, folder=given.records, progress=_tell)))
    if blocks:
        found = {
            name: comparisons.studied_changes(name, blocks=blocks, folder=given.records, progress=_tell)
            for name in comparisons.SCENARIOS
        }
        parts += [_CHANGES.format(axons=comparisons.AXONS, blocks=len(blocks)), _changes(found), _CHANGES_SHORT]
    return "\n".join(parts)


def _replace_section(section: str) -> None:
    """Write a section of the page in place of the one that has its heading."""
    text = PAGE.read_text(encoding="utf-8")
    heading = section.splitlines()[0] + "\n"
    before, found, after = text.partition(heading)
    if not found:
        before, _, after = text.partition(_NEXT)
        after = _NEXT + after
    else:
        after = after[after.index("\n## ") + 1 :]
    PAGE.write_text(before + section + "\n" + after, encoding="utf-8")
    print(f"{heading.strip('# ').strip()}: written to {PAGE}")


def _tell(name: str, seed: int) -> None:
    print(f"{datetime.now(tz=UTC):%H:%M:%S} {name} seed {seed}", flush=True)


def _page(movies: dict, axons: dict, *, compared: str, note: str) -> str:
    movies = {name: records for name, records in movies.items() if records}
    parts = [
        _INTRODUCTION.format(version=napari_boutonrelease.__version__) + (f"\n{note}\n" if note else ""),
        "## The recordings\n",
        _table(
            ("scenario", "movies (seeds)", "boutons a movie", "trials × pulses", "what differs from the preset"),
            [_scenario(name, records) for name, records in movies.items()],
        ),
        "## Finding boutons\n\n" + _FINDING,
        _finding(movies),
        "## Amplitudes\n\n" + _AMPLITUDES,
        _amplitudes(movies),
        "## Release probability and single calls\n\n" + _RELEASE,
        _release(movies),
        _calls(movies),
        "## Neighbours\n\n" + _NEIGHBOURS,
        _neighbours(movies),
        "## Pulse pairs\n\n" + _PAIRS,
        _pairs(movies),
        _PAIRS_ALONE,
        _pair_statistics(),
        "## Numbers of sites\n\n" + _SITES,
        _sites(movies),
        compared,
        _NEXT + "\n" + _AXONS,
        _statistics(axons),
        _silent_axons(axons),
        _SHORT,
    ]
    return "\n".join(part if part.endswith("\n") else part + "\n" for part in parts)


def _scenario(name, records):
    preset, changes = study.SCENARIOS[name]
    recipe = study.scenario_recipe(name)
    seeds = [record["seed"] for record in records]
    differs = ", ".join(f"`{key}={value}`" for key, value in changes.items()) or "nothing"
    return (
        name if name == preset else f"{name} (preset {preset})",
        f"{len(seeds)} ({min(seeds)} to {max(seeds)})",
        recipe.n_boutons,
        f"{recipe.trials} × {recipe.pulses}",
        differs,
    )


def _finding(movies):
    rows = []
    for name, records in movies.items():
        one = summary.detection(records)
        rows.append(
            (
                name,
                f"{one['recall']:.3f} of {one['clear']}" if one["clear"] else "",
                f"{one['recall_all']:.3f} of {one['releasing']}" if one["releasing"] else "",
                f"{one['false_share']:.3f} ({one['false_by_responses']})" if one["releasing"] else "",
                f"{one['movies_with_false']} of {one['movies']}",
                f"{one['never_called_releasing']} of {one['never']}",
                _number(one["position_rms_um"]),
                _number(one["drift_rms_px"]),
            )
        )
    header = (
        "scenario",
        "recall, clear",
        "recall, all releasing",
        "false share (count)",
        "movies with a false one",
        "never-releasing ones called releasing",
        "position error, RMS (µm)",
        "drift error, RMS (px)",
    )
    return _table(header, rows)


def _amplitudes(movies):
    rows = []
    for name, records in _with_release(movies):
        one = summary.amplitudes(summary.releasing(records))
        ours, observer = one["ours"], one["observer"]
        rows.append(
            (
                name,
                one["boutons"],
                f"{one['snr']:.1f}",
                f"{ours['error_over_limit']:.3f}",
                f"{observer['error_over_limit']:.3f}",
                f"{ours['failure_over_limit']:.3f}",
                f"{1 / ours['failure_over_stated']:.3f}",
                f"{ours['scale']:.3f} ± {ours['scale_sd']:.3f}",
                f"{observer['scale']:.3f} ± {observer['scale_sd']:.3f}",
            )
        )
    header = (
        "scenario",
        "boutons",
        "median q / limit",
        "error SD / limit",
        "observer's",
        "failures' SD / limit",
        "stated noise / failures' SD",
        "scale, mean ± SD",
        "observer's",
    )
    return _table(header, rows)


def _release(movies):
    rows = []
    for name, records in _with_release(movies):
        boutons = summary.releasing(records)
        rows += [
            (f"{name}, pulse {pulse + 1}", *_release_row(summary.release(boutons, pulse=pulse)))
            for pulse in range(len(boutons[0]["p"]))
        ]
        if len(boutons[0]["p"]) > 1:
            rows.append((f"{name}, all", *_release_row(summary.release(boutons))))
    return _table(_RELEASE_HEADER, rows)


def _release_row(one):
    low, high = one["ratio_interval"]
    return (
        one["values"],
        f"{one['bias']:+.4f} ± {one['bias_se']:.4f}",
        f"{one['bias_known']:+.4f}",
        f"{one['rms']:.4f}",
        f"{one['rms_same']:.4f}",
        f"{one['rms_known']:.4f}",
        f"{one['ratio']:.3f} ({low:.2f} to {high:.2f})",
        f"{one['coverage']:.3f} ± {one['coverage_se']:.3f}",
    )


def _calls(movies):
    rows = []
    for name, records in _with_release(movies):
        one = summary.calls(summary.releasing(records))
        rows.append(
            (
                name,
                f"{100 * one['ours']:.2f} %",
                f"{100 * one['observer']:.2f} %",
                f"{100 * one['known']:.2f} %",
                f"{one['ours'] / one['observer']:.2f}",
            )
        )
    return _table(("scenario", "wrong calls", "observer's", "with everything known", "ours / observer's"), rows)


def _neighbours(movies):
    rows = []
    for name in ("crowded", "crowded-silent"):
        boutons = summary.releasing(movies.get(name, []), near_um=(0.8, 1.2))
        if boutons:
            rows.append((name, *_release_row(summary.release(boutons))))
    return _table(_RELEASE_HEADER, rows)


def _pairs(movies):
    rows = []
    for name, records in _with_release(movies):
        boutons = [spot for spot in summary.releasing(records) if "ppr" in spot["ours"]]
        if not boutons:
            continue
        one = summary.pulse_pairs(boutons)
        ours, observer = one["ours"], one["observer"]
        rows.append(
            (
                name,
                ours["boutons"],
                f"{ours['bias']:+.3f} ± {ours['bias_se']:.3f}",
                f"{observer['bias']:+.3f} ± {observer['bias_se']:.3f}",
                f"{ours['pooled']:.3f} (true {ours['pooled_true']:.3f})",
                f"{ours['coverage']:.3f}",
                ", ".join(f"{count} {verdict or 'undefined'}" for verdict, count in one["verdicts"].items()),
            )
        )
    header = (
        "scenario",
        "boutons",
        "bias of PPR",
        "observer's",
        "ratio of all means",
        "intervals that hold the truth",
        "verdicts",
    )
    return _table(header, rows)


def _pair_statistics():
    rows = []
    for q in (4.5, 2.1):
        found = study_pairs(Population(q=q, pulses=2), axons=300, rng=np.random.default_rng(7))
        for low, high in ((0.1, 0.2), (0.2, 0.4), (0.4, 0.9)):
            one = summarise_pairs(found, p_first=(low, high))
            rows.append(
                (
                    f"{q:g}",
                    f"{low:g} to {high:g}",
                    one["boutons"],
                    one["undefined"],
                    f"{100 * one['bias']:+.1f} ± {100 * one['bias_se']:.1f} %",
                    f"{one['coverage']:.3f}",
                )
            )
    header = ("q/noise", "p_release of pulse 1", "boutons", "undefined", "bias of PPR", "coverage")
    return _table(header, rows)


def _sites(movies):
    rows = []
    for name, records in _with_release(movies):
        one = summary.sites(summary.releasing(records))
        ours, observer = one["ours"], one["observer"]
        rows.append(
            (
                name,
                one["boutons"],
                f"{ours['right']:.3f}",
                f"{observer['right']:.3f}",
                f"{ours['in_set']:.3f}",
                f"{ours['unresolved']:.2f}",
                f"{observer['unresolved']:.2f}",
            )
        )
    header = (
        "scenario",
        "boutons",
        "exactly right",
        "observer's",
        "true n in `n_set`",
        "`n_unresolved`",
        "observer's",
    )
    return _table(header, rows)


def _two_conditions(records):
    one = two_conditions.summarise_fields(records)
    ours, observer = one["ours"], one["observer"]
    sites = _table(
        ("", "analysis", "observer's amplitudes"),
        [
            ("boutons", one["boutons"], one["boutons"]),
            *(
                (label, f"{ours[key]:.3f}", f"{observer[key]:.3f}")
                for label, key in (
                    ("exactly right", "right"),
                    ("right within 1", "within_one"),
                    ("true n in `n_set`", "in_set"),
                    ("more than one number in `n_set`", "unresolved"),
                    ("q interval holds the truth", "q_coverage"),
                    ("said to differ in p_site, as they do (p < 0.05)", "p_changed"),
                    ("said to differ in q, as they do not (p < 0.05)", "q_changed"),
                )
            ),
            (
                "bias of q",
                *(f"{100 * who['q_bias']:+.1f} ± {100 * who['q_bias_se']:.1f} %" for who in (ours, observer)),
            ),
            *(
                (f"`{name}` holds the truth", *(_share_of(who["changes"][name]) for who in (ours, observer)))
                for name in comparisons.CHANGES
            ),
        ],
    )
    found = (
        f"{one['axons']} axons of 12 boutons, each filmed twice (seeds 1 to {one['axons']}): median q / noise "
        f"{one['snr']:.1f}; {one['not_found_twice']} boutons were not found in both recordings, "
        f"{one['wrong_matches']} were matched with another one.\n"
    )
    return found + "\n" + sites


def _changes(found):
    rows = [_change_row(name, one, tests=comparisons.TESTS) for name, one in found.items()]
    rows.append(_change_row("all", comparisons.pool(found.values()), tests=()))
    rows[-1] += tuple(
        _found(comparisons.pool(found[name] for name in names), test)
        for test, names in comparisons.WITHOUT_CHANGE.items()
    )
    names = [f"`{name}`" for name in comparisons.CHANGES]
    return _table(("", *names, "p_site said to differ", "q said to differ"), rows)


def _change_row(name, found, *, tests):
    said = comparisons.summarise_changes(found)
    return (
        name,
        *(_share_of(said[change]) for change in comparisons.CHANGES),
        *(_found(found, test) for test in tests),
    )


def _found(found, test):
    one = comparisons.summarise_changes(found)[test]
    return f"{one['found']:.3f} ({one['boutons']})"


def _percent(value, se):
    return f"{100 * value:+.1f} ± {100 * se:.1f} %"


def _share_of(one):
    return f"{one['coverage']:.3f} ({one['boutons']})" if one["boutons"] else ""


def _statistics(axons):
    rows = []
    for population, n_axons, found in axons.values():
        if found is None:
            continue
        keep = found["p"][:, 0] > 0
        if not keep.any():
            continue
        one = summarise({key: values[keep] for key, values in found.items()})
        rows.append(
            (
                _of_population(population),
                f"{n_axons}",
                one["values"],
                f"{one['bias']:+.4f} ± {one['bias_se']:.4f}",
                f"{one['rms']:.4f}",
                f"{one['rms_if_known']:.4f}",
                f"{one['ratio']:.3f}",
                f"{one['coverage']:.3f}",
                f"{one['wrong'] / one['wrong_if_known']:.2f}",
                f"{one['n_right']:.2f} / {one['n_in_set']:.3f}",
            )
        )
    header = (
        "axons",
        "number",
        "values",
        "bias",
        "RMS error",
        "all but p known",
        "ratio",
        "coverage",
        "wrong calls / all known",
        "n right / in set",
    )
    return _table(header, rows)


def _silent_axons(axons):
    rows = []
    for population, _, found in axons.values():
        if found is None or not population.silent:
            continue
        never = found["p"][:, 0] == 0
        rows.append(
            (
                _of_population(population),
                int(never.sum()),
                f"{np.sqrt(np.mean(found['estimate'][never] ** 2)):.4f}",
                f"{np.median(found['hi'][never]):.3f}, {found['hi'][never].max():.3f}",
                f"{np.mean(found['lo'][never] == 0):.3f}",
                f"{np.mean(found['silent_probability'][never] > 0.5):.3f}",
            )
        )
    header = (
        "axons",
        "silent boutons",
        "RMS of p_release",
        "upper limit: median, largest",
        "interval includes 0",
        "said to be silent",
    )
    return _table(header, rows)


def _of_population(one: Population) -> str:
    parts = [f"q/noise {one.q:g}"]
    if one.pulses > 1:
        parts.append("paired")
    if one.boutons == 1:
        parts.append("one bouton alone")
    if one.trials != 80:
        parts.append(f"{one.trials} trials")
    if one.silent:
        parts.append(f"{one.silent} of {one.boutons} silent")
    if one.p_release != (0.1, 0.9):
        parts.append("p {:g} to {:g}".format(*one.p_release))
    return ", ".join(parts)


def _with_release(movies):
    return [(name, records) for name, records in movies.items() if summary.releasing(records)]


def _number(value: float) -> str:
    return f"{value:.3f}" if np.isfinite(value) else ""


def _table(header, rows) -> str:
    lines = [header, ["---"] * len(header), *rows]
    return "\n".join("| " + " | ".join(str(cell) for cell in line) + " |" for line in lines) + "\n"


_RELEASE_HEADER = (
    "",
    "values",
    "bias",
    "bias, all but p known",
    "RMS error",
    "observer, same inference",
    "observer, all but p known",
    "ratio to the latter (95 % interval)",
    "coverage",
)

_INTRODUCTION = """# How good are the numbers?

Recordings are simulated vesicle by vesicle and photon by photon, analysed with the default settings like any recording,
and compared with what truly happened. The simulation shares no code with the analysis.

The yardstick is an *ideal observer*: the same likelihood, but amplitudes read with the true footprints, light, kinetics
and drift. What nobody can know remains unknown to it, too: the baseline of each trial and, frame by frame, the local
background and the neighbours' brightness. It then makes the same inference as the analysis (`same inference`), or it
also knows the number of sites, q, the variation of q and the noise, and only `p_release` is left to find by maximum
likelihood (`all but p known`). The smallest error that any amplitude can have is the Cramér-Rao limit of that
likelihood for a response in darkness: it leaves out the photons of the responses themselves and the fluctuation of the
diffuse light.

This page is made by `python docs/make_validation.py RECORDS` (version {version}); every number in it is measured.
"""
_FINDING = """A bouton is *clear* if one vesicle is at least 3 times the Cramér-Rao SD and it releases in at least one
trial in ten. Found is what lies within 0.5 µm. False are those found by responses (`found_by` says `responses` or
`both`) where nothing releases. Specks and silent boutons that the shape finds must not be called releasing: they are
flagged `silent` or their interval of `p_release` includes 0.

Required: recall at least 0.95, false share at most 0.05, positions within 0.1 µm; an axon that never releases gives no
bouton by responses in 19 of 20 recordings.
"""
_AMPLITUDES = """The error of an amplitude is estimate minus truth, the scale of each bouton (what an error of its F0
does) taken out; SD by the robust estimator that spontaneous releases do not move.

Required: error SD at most 1.15 times the limit; the stated noise is the SD of failures within 10 %.
"""
_RELEASE = """Required: bias less than 0.01, RMS error at most 1.15 times that of the observer who knows all but p at
q/noise of 4 and more, at most 1.3 times at about 2; 93 to 97 % of the 95 % intervals hold the truth.
"""
_NEIGHBOURS = """Boutons with a neighbour 0.8 to 1.2 µm away.
"""
_PAIRS = """Required: no bias beyond chance, 93 to 97 % of the intervals hold the truth. In `equal-25ms` both pulses
release alike, 25 ms apart with a decay of 100 ms: PPR is 1. In `slow-decay` they do so, too, and a fifth of the
response decays with 400 ms: its tail must not pass for facilitation.
"""
_PAIRS_ALONE = """Without movies, by the release probability of pulse 1 (80 trials, that of pulse 2 drawn independently
between 0.1 and 0.9; seed 7). Where pulse 1 hardly releases, boutons whose first mean is within noise of zero have no
ratio, and leaving them out biases those that remain downward:
"""
_SITES = """Required: exactly right at least 0.95 times as often as the observer; the true number in `n_set` in at
least 93 %.
"""
_NEXT = "## The statistics alone, without movies\n"
_COMPARED = """Boutons with 1 to 4 sites are filmed at `p_site` 0.15 and at 0.6, 80 pairs of pulses each. Either movie
is analysed by itself, boutons found in it; then both recordings are compared with the default settings. The
observer reads the amplitudes of the same movies and hands them to the same comparison; both columns hold the boutons
that the analysis found twice.

Required: n exactly right at least 0.95 times as often as with the observer's amplitudes, right within 1 in at least
95 %, the true n in `n_set` in at least 93 %; 93 to 97 % of the intervals hold the truth; where p_site stays, a change
of it is found in 4 to 6 %.
"""
_CHANGES = """Without movies, 8 boutons an axon, 80 pairs of pulses, `p_site` of the first recording drawn for either
pulse between 0.1 and 0.6 (0.2 and 0.6 at q/noise 2.5), q/noise 4.4 where nothing else is said. *Release changes*
multiplies the odds of `p_site` by 4, *vesicles change* multiplies q by 0.7 (0.8 at q/noise 2.5), *both change* odds by
0.4 and q by 1.3. {blocks} blocks of {axons} axons each; `p_release_change` rests on the first of them, which alone
estimates each recording's own release. In brackets: boutons that have an estimate. Tests are at the level of 5 %;
the last row has them where there is no such change:
"""
_CHANGES_SHORT = """`q_ratio` holds the truth a little too seldom where release falls and vesicles grow: few of them are
left to tell their size.
"""
_AXONS = """Amplitudes are drawn directly: `p_release` even between 0.1 and 0.9, 1 to 4 sites, q with a spread of 10 %
between boutons, gamma vesicles of CV 0.3, 8 boutons with 80 trials where nothing else is said, the noise known from 300
null amplitudes. Seed 11.
"""
_SHORT = """## Where it falls short

- **One bouton alone in dim light.** With q at about twice the noise and no other bouton to lend its q, the RMS error of
  `p_release` is some 1.3 times that of the observer, and it is biased by the expected size of a vesicle.
- **Dim and seldom.** Where all boutons of an axon release in fewer than 15 % of the trials and q is about twice the
  noise, the RMS error is some 1.4 times the observer's.
- **PPR of boutons that hardly release at pulse 1.** See the table above: below 0.2 the mean of the defined ratios is
  too low in dim light. Quote the release probability of both pulses instead.
- **F0 beside a bouton that was not found.** Where a silent bouton is missed less than a micrometre from others, its
  light can pass for the axon under these: F0 of some comes out too low by a quarter to a half and their amplitudes too
  high (the SD of the scale in `crowded-silent`, where it happened in 2 of 8 recordings); `p_release` is unharmed.
- **Noise that looks like a response.** About two dim recordings in five hold a place found by responses where nothing
  is. Most of these have no light at rest, hence no usable F0 and no `p_release`.
- **Numbers of sites.** From 80 trials of one condition they stay unresolved in four boutons of five, for the observer
  as for the analysis.
"""


if __name__ == "__main__":
    main()
