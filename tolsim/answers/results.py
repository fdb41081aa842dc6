"""What a run found: summary, units and factors, in memory or in a results folder.

Folder
------
``summary.json``     the summary below
``units.parquet``    one row per unit, condition and state: verdict, outcome, every figure
``factors.parquet``  one row per unit: the value drawn for every factor
``report.html``      the report, one file
``study.toml``       the study as it was run; recorded ramps it names lie beside it
``chunks/``          finished chunks of units; what a killed run leaves

Summary, format 1
-----------------
Numbers are SI floats (temperatures in degC, ages in hours), shares are 0..1, `null` means
not known (an interval that this many units cannot close).  Every `low`, `high` and
`interval` has the confidence stated in `yield`.

``format``      1; raised when a key changes its meaning
``title``, ``kind``   of the study
``supplies``    [{rail, net, voltage (nominal), words (its series parts and its rise)}]
``yield``       {estimate, low, high, confidence, units, passed, failed, undecided}.  A unit
                fails if it fails in any case; else it is undecided if it is in any case.
                estimate = passed / units; low takes undecided units as failed, high as passed
                With lots the interval counts lots, not units, and two keys are added: counted_by
                ("lots") and worth (number of independent units that would tell as much)
``lots``        {} unless the study says how units share reels; else {units_per_lot, lots (number
                of them), lots_together (lots that may share reels), reels {name: lots it lasts},
                failures [{failed, lots}] (so many lots have so many failing units),
                worst [{lot, first_unit, units, failed, undecided}], with_failure {lots, of (whole
                lots), share, low, high, first_lots}, lost_when, lost {the same},
                batches [{boards, share (chance that so many boards of one lot hold one that
                fails), low, high, independent (the same for boards of many lots)}],
                between [{target, title, share (of its variance that lies between lots), low,
                high}], independent {low, high} (the yield interval if units shared nothing)}
``power_on``    {} if no unit was switched on in time; else {share (of the units that look sure to
                start, integrated nevertheless), units, of_units, cases [{condition, state, units
                (integrated), in_doubt, sure, sure_failed, fates [{fate ("starts", "latched",
                "dies", "bursts", "other swing", "undecided"), units, first_units}], time {units,
                p5, p50,
                p95, interval} (s, from power-on to 90 % of the swing)}], sure_failed (units),
                warning (of them), latched {} or {units, first_units, current {median, highest},
                shortest_damage_time, never_damaged, trip_time, saved_by_trip}}
``mission``     {} unless the study states one; else {years, hours (of running), cases [{condition,
                state, hours, share}], power [{figure (mean_input_power, mean_output_power,
                energy_per_year), unit_of_measure, nominal, units, missing (without an orbit in
                some case), p5, p50, p95, interval {p5: [low, high], ...}}], in_order {units (that
                pass in every hour), of, share, low, high, of_life {mean, least} (share of the
                hours), undecided (share of all hours)}, limits [{limit, rule, figure, units (ever
                beyond it), share, low, high, first_units, of_life {mean, most}}], temperatures
                [{part, figure, units, missing, mean {p50, p95} (over the hours), highest {p50,
                p95}, equivalent_hours {p50, p95} (at `reference`, or null)}], reference (degC),
                activation_energy (eV)}
``transitions`` {} unless the study states changes of load; else {share (of the units that are to
                be followed in time), units (that were), of, phases (moments of the cycle each),
                changes [{number, from, to, time (s), condition, needs, stays_while ({part, figure,
                at_least} or null), fates [{fate, units, of, share, low, high, first_units}]}]}.
                What a rule tells ("does not ignite", "falls back", "not reached") is known of all
                units, the rest ("arrives", "dies", "ends elsewhere", "undecided") of those
                followed.  Peaks and energies stand among `figures`, in the state that is reached
``cases``       [{condition, state, and all keys of `yield` but for that case alone}]
``outcomes``    [{condition, state, outcome, units, share, low, high, first_units, failed,
                no_limit_broken {units, first_units}}]; `failed` counts those of them that
                fail, `no_limit_broken` those that fail though no limit is broken
``limits``      [{limit (number in the study, from 0), rule, figure, title, unit_of_measure,
                parts, states, conditions, bound {at_most, at_least, share_of_rating},
                units (failing), share, low, high, first_units,
                by_case [{condition, state, units}], by_part [{part, units}]}]
``figures``     [{figure, title, part ("" for the stage), condition, state, unit_of_measure,
                worse ("high" or "low"), nominal, units, missing, p1, p5, p50, p95, p99,
                interval {p1: [low, high], ...}, bound_95 (95 % of units stay within it, on the
                worse side), lowest, highest, rating, share_of_rating (of p99, or p1 if low is
                worse), limit, limit_side, rule, at_most, at_least}]
``ranking``     [{target ("start_margin", "Q1.drain_peak", "pass/fail"; the worst over all
                cases of each unit), title, unit_of_measure, units, missing, reason (why not
                ranked, else ""), remainder {share, low, high}, factors [{factor, share, low,
                high, distinguishable, rank_correlation, rank_low, rank_high}], largest share
                first}]
``trim``        one entry per trim, in the order in which they are done (empty without):
                [{trim, part, quantity, unit_of_measure, range, resolution, reading,
                reading_title, reading_unit, target, within, condition, state (the bench),
                endings {set, too_coarse, exhausted, no_reading, unsettled} (units),
                exhausted_share {share, low, high}, at_low_end (units exhausted there),
                first_not_set, nominal (position of the nominal unit), position_counts (units in
                equal parts of the range, from its low end), position, turns,
                error (true reading over target, less 1, of units that were set), before (the
                same of untrimmed units), needed_range [from, to] (99 % of the units end
                there, or would have to: beyond the range extrapolated), needed_resolution
                (largest step with which 99 % can be set),
                strains [{part, figure, title, unit_of_measure, rating, p50, p99, highest}] (on
                the operator's way), drift [{condition, state, and the keys of a spread}] (reading
                over target, less 1)}]; position, turns, error and before are spreads {low, p5,
                p50, p95, high, width}, 99 % of units between low and high
``quality``     {energy_balance {worst, median}, orbit_residual {worst, median},
                solved_by {way: rows}, solvers [{condition, state, solver, harmonics (0 for
                shooting), frequency_error, peak_error, rms_error (largest on the pilot units,
                against shooting extrapolated in its steps), order_frequency_error, ... (the same
                against twice the harmonics; null for shooting), shooting_frequency_error, ...
                (of shooting at the study's steps), settled_share, reason}; measured in the first
                condition of a state, valid for all of them] (empty: shooting served all
                cases), crosscheck {units, share, worst {figure, condition, state, difference},
                worst_judged (the same among figures the study judges), warning (of it)} (empty
                without bulk solver),
                rechecked {units, share, agreed, worst_difference, worst_frequency_difference},
                steps {steps_per_cycle, recheck_steps_per_cycle, recheck_cycles},
                self_heating [{part, condition, state (where it runs hottest), rise (K, of the
                nominal unit), gap (K, within which the rises by the own losses of 95 % of units
                lie from those taken), settled (in that case)}]: passive parts whose values follow
                their own temperature; part "" tells a case without orbit when warm}
                With other than random sampling also sampling (how, and what intervals mean then)
``reels``       one entry per measured law in use (empty without): [{table, parts, quantity,
                unit_of_measure ("share" for relative deviations), file, pieces, values
                (readings, rising), mean, sd, meter_noise, meter_bias, test_frequency (Hz or
                null), shape ("normal", "lognormal", "as measured"), fit_p (Anderson-Darling, of
                the normal or lognormal shape; null for less than 8 pieces), remarks (what the
                readings look like), next {low, high, sd, curve [values, shares below]} (law of
                the next piece)}]
``law_check``   {done, reason (why not done), laws (tolerance and lot laws), guesses and
                common_practice (so many of them), alternatives [{law, words}],
                together [{law, method, estimate, low, high, change (of the yield),
                effective_units (what weights leave; null: not covered), direct {units, passed,
                as_expected} (units drawn anew) or null}] (all tables at once), families
                [{tables, parts, bases, guesses, lots, entries [as in together]}] (one family of
                tables at a time, largest change first), meters [{tables, parts, entries}] (what was
                measured, its meter off by all it may), units (read, the first 5000), direct_units,
                depends ("no", "perhaps", "yes"), next {tables, parts, law, estimate, change, lots,
                pieces} (the guess worth measuring next) or null, sentence}; method is
                "weights", "response" (figures fitted) or "neighbours" (units alike), each also with
                ", drawn anew" (corrected)
``prototype``   {measured, threshold (of joint_p), sentence, boards [{name, title, verdict ("pass",
                "fail", "no answer"), reason (why no answer), solved_again, probes, fixed {address:
                value}, units (that run), without (those that do not), joint_p, distance
                (Mahalanobis), chi_square_p, readings [{figure, title, part, condition, state,
                unit_of_measure, worse, good_side (away from its limits) or null, value,
                uncertainty (k = 2), p5, p50, p95, deviation (of the units), bare_p50 (without
                probe), percentile, p, z, outside (farther from every unit than the uncertainty),
                share (of the squared distance)}],
                suspect {reading, factor, correlation}, sentence}]}
``start_map``   {} unless asked for in the run; else {condition, state, units, confidence, across
                {what, rails, all_rails, unit_of_measure, values}, down {the same}, cells [{across,
                down (values), with_orbit (units), outcomes [{outcome ("starts" first, "latched",
                "dies away", "bursts", "other swing", "undecided"), units, share, low, high}],
                first_failing, start_time (s, median, to 90 % of the swing; or null)}]}
``supply_contract``  {} unless asked for; else {conditions (a unit must start in all), state, units,
                confidence, covers, questions [{question ("ramp_time", "supply"), unit_of_measure,
                rails [{rail, voltage}], ends [easy, hard] (of what was tried), with_border (units
                whose border lies between), beyond (that start at the hard end too), never (not
                even at the easy one), first_never, not_single (units with more than one border),
                first_not_single, percentiles [{share (of units, from the most delicate), value,
                interval}], bound {value (null: none within what was tried), covers, enough (units
                for the share asked for), needs (units)}, borders (of every unit, or null)}]}
``repeated_starts``  {} unless asked for; else {condition, state, tries, confidence, off_time,
                ramp_jitter, charge_counts (whether leftover charge had a say), units [{unit,
                chosen, start_margin, starts (tries), share, low, high, all_low (low, if all
                tries started), outcomes [{outcome, tries}], start_time {shortest, p50, longest}
                or null}], split {units (at random), between (share of the variance of starting
                that lies between units; null: nothing varies)}}
``provenance``  {seed, versions {name: version}, study_sha256, tables {name: sha256},
                recordings {path: sha256} (only if supplies have recorded ramps), ...}
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pandas as pd

from tolsim.answers.unit_files import Columns, FrameColumns, UnitFiles, damaged, write_text
from tolsim.errors import RequestError

SUMMARY_FILE = "summary.json"
STUDY_FILE = "study.toml"
TABLES_FOLDER = "tables"


@dataclass(frozen=True)
class Results:
    """Everything a run found.

    Attributes
    ----------
    summary : mapping
        See above; empty for a run that was stopped before its end.
    study_text : str
        The study file as it was run.
    folder : Path or None
        Where the results are stored, if they are.
    unit_columns, factor_columns : Columns
        The two tables, read one column at a time when they are large.
    """

    summary: Mapping[str, Any]
    study_text: str
    folder: Path | None
    unit_columns: Columns = field(repr=False)
    factor_columns: Columns = field(repr=False)

    @classmethod
    def in_memory(
        cls,
        summary: Mapping[str, Any],
        study_text: str,
        units: pd.DataFrame,
        factors: pd.DataFrame,
    ) -> Results:
        """Results that are stored nowhere."""
        return cls(summary, study_text, None, FrameColumns(units), FrameColumns(factors))

    @classmethod
    def open(cls, folder: Path | str) -> Results:
        """Open a results folder, also one of a run that was killed.

        Raises
        ------
        RequestError
            If the folder holds neither a summary nor a finished chunk, or one is damaged.
        """
        place = Path(folder)
        files = UnitFiles(place)
        summary_file, study_file = place / SUMMARY_FILE, place / STUDY_FILE
        try:
            summary = json.loads(summary_file.read_bytes()) if summary_file.exists() else {}
        except ValueError:
            raise damaged(summary_file) from None
        if not summary and not files.units().paths:
            raise RequestError(
                f"'{place}' holds no results: neither {SUMMARY_FILE} nor a finished chunk. "
                "Name the folder that `tolsim run` wrote."
            )
        text = study_file.read_text(encoding="utf-8") if study_file.exists() else ""
        for columns in (files.units(), files.factors()):
            columns.check()
        return cls(summary, text, place, files.units(), files.factors())

    @property
    def complete(self) -> bool:
        """False if the run was stopped before all its units were done."""
        return bool(self.summary)

    @property
    def units(self) -> pd.DataFrame:
        """One row per unit, condition and state."""
        return _frame(self.unit_columns)

    @property
    def factors(self) -> pd.DataFrame:
        """One row per unit: the value drawn for every factor."""
        return _frame(self.factor_columns)

    @property
    def yield_(self) -> pd.Series[Any]:
        """Yield with its interval and counts."""
        return pd.Series(self.summary.get("yield", {}), dtype=object)

    @property
    def cases(self) -> pd.DataFrame:
        """Yield in every condition and state."""
        return pd.DataFrame(self.summary.get("cases", []))

    @property
    def outcomes(self) -> pd.DataFrame:
        """Units by condition, state and outcome."""
        return pd.DataFrame(self.summary.get("outcomes", []))

    @property
    def limits(self) -> pd.DataFrame:
        """Failing units of every limit."""
        return pd.DataFrame(self.summary.get("limits", []))

    @property
    def figures(self) -> pd.DataFrame:
        """Percentiles of every figure in every case; intervals as columns p50_low, p50_high."""
        rows = []
        for entry in self.summary.get("figures", []):
            row = {key: value for key, value in entry.items() if key != "interval"}
            for name, (low, high) in entry["interval"].items():
                row[f"{name}_low"], row[f"{name}_high"] = low, high
            rows.append(row)
        return pd.DataFrame(rows)

    @property
    def transitions(self) -> pd.DataFrame:
        """One row per change of load, condition and fate."""
        return pd.DataFrame(
            [
                {key: value for key, value in change.items() if key != "fates"} | fate
                for change in self.summary.get("transitions", {}).get("changes", [])
                for fate in change["fates"]
            ]
        )

    @property
    def ranking(self) -> pd.DataFrame:
        """One row per target and factor."""
        return pd.DataFrame(
            [
                {"target": entry["target"], **factor}
                for entry in self.summary.get("ranking", [])
                for factor in entry["factors"]
            ]
        )

    @property
    def start_map(self) -> pd.DataFrame:
        """One row per cell and outcome of the start map."""
        return pd.DataFrame(
            [
                {"across": cell["across"], "down": cell["down"], **outcome}
                for cell in (self.summary.get("start_map") or {}).get("cells", [])
                for outcome in cell["outcomes"]
            ]
        )

    @property
    def lots(self) -> pd.DataFrame:
        """Units, failed and undecided of every lot; empty if units are not built in lots."""
        per_lot = self.summary.get("lots", {}).get("units_per_lot")
        if per_lot is None:
            return pd.DataFrame(columns=["lot", "units", "failed", "undecided"])
        rows = pd.DataFrame({name: self.unit_columns.column(name) for name in ("unit", "verdict")})
        failed = (rows["verdict"] == "fail").groupby(rows["unit"]).any()
        undecided = (rows["verdict"] == "undecided").groupby(rows["unit"]).any() & ~failed
        units = pd.DataFrame({"units": 1, "failed": failed, "undecided": undecided}).astype(int)
        found = units.groupby(units.index // per_lot).sum()
        return found.rename_axis("lot").reset_index()

    @property
    def trims(self) -> pd.DataFrame:
        """One row per trim: what was turned to what, how units ended, percentiles as columns."""
        rows = []
        for entry in self.summary.get("trim", []):
            nested = ("position_counts", "strains", "drift")
            plain = {key: value for key, value in entry.items() if key not in nested}
            row = {key: value for key, value in plain.items() if not isinstance(value, dict)}
            for name in ("position", "turns", "error", "before"):
                row |= {f"{name}_{key}": value for key, value in entry[name].items()}
            rows.append({**row, **entry["endings"]})
        return pd.DataFrame(rows)

    @property
    def law_check(self) -> pd.DataFrame:
        """One row per set of tables and law put in its place: the yield that would be."""
        found = self.summary.get("law_check", {})
        scopes = [("all tables", found.get("together", []))]
        scopes += [(", ".join(f["tables"]), f["entries"]) for f in found.get("families", [])]
        return pd.DataFrame(
            [{"tables": name, **entry} for name, entries in scopes for entry in entries]
        ).drop(columns="direct", errors="ignore")

    @property
    def prototype(self) -> pd.DataFrame:
        """One row per board and reading: measured, predicted, percentile."""
        boards = self.summary.get("prototype", {}).get("boards", [])
        return pd.DataFrame(
            [{"board": board["name"], **one} for board in boards for one in board["readings"]]
        )

    @property
    def quality(self) -> Mapping[str, Any]:
        """How good the solutions are."""
        quality: Mapping[str, Any] = self.summary.get("quality", {})
        return quality

    @property
    def provenance(self) -> Mapping[str, Any]:
        """What is needed to repeat the run: seed, versions, hashes."""
        provenance: Mapping[str, Any] = self.summary.get("provenance", {})
        return provenance

    def save(self, folder: Path | str) -> Results:
        """Write summary, study and, if they were in memory, the two tables; return the stored."""
        place = Path(folder)
        files = UnitFiles(place)
        place.mkdir(parents=True, exist_ok=True)
        if self.folder is None:
            files.write_chunk(0, self.units, self.factors)
            files.merge()
        write_text(place / STUDY_FILE, self.study_text)
        write_text(place / SUMMARY_FILE, summary_json(self.summary))
        return Results.open(place)


def summary_json(summary: Mapping[str, Any]) -> str:
    """Text of `summary.json`: plain JSON, the same bytes for the same summary."""
    return json.dumps(summary, indent=1, allow_nan=False, ensure_ascii=False) + "\n"


def _frame(columns: Columns) -> pd.DataFrame:
    return pd.DataFrame({name: columns.column(name) for name in columns.names})
