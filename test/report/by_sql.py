"""What a ledger says, worked out anew: SQL over the raw rows, and SciPy. Nothing of the report is used here."""

from __future__ import annotations

import json
import math
import sqlite3
from pathlib import Path
from typing import Any

import numpy as np
from scipy import stats

from fieldnav_ros.parameters import TABLE

# An episode counts where it was scored and never voided. A void that follows the scoring of its own episode, with
# no other scoring or void between them, strikes every decision since.
VIEWS = """
CREATE TEMP VIEW void AS
    SELECT seq, json_extract(payload, '$.episode_id') AS id, json_extract(payload, '$.rerun_id') AS rerun,
           json_extract(payload, '$.floor_time_s') AS floor_s FROM events WHERE kind = 'episode_voided';
CREATE TEMP VIEW score AS
    SELECT seq, json_extract(payload, '$.episode_id') AS id, json_extract(payload, '$.outcome.kind') AS kind,
           json_extract(payload, '$.outcome.time') AS time, json_extract(payload, '$.cost') AS cost,
           json_extract(payload, '$.floor_time_s') AS floor_s FROM events WHERE kind = 'episode_scored';
CREATE TEMP VIEW struck AS
    SELECT score.seq AS first, void.seq AS last FROM void JOIN score ON score.id = void.id
    WHERE score.seq =
        (SELECT MAX(seq) FROM events WHERE seq < void.seq AND kind IN ('episode_scored', 'episode_voided'));
CREATE TEMP VIEW decision AS
    SELECT seq, kind, payload FROM events WHERE NOT EXISTS
    (SELECT 1 FROM struck WHERE events.seq > struck.first AND events.seq < struck.last);
CREATE TEMP TABLE place AS
    WITH RECURSIVE
    planned(id, phase, batch, role, set_id, layout) AS (
        SELECT json_extract(run.value, '$.episode_id'), json_extract(payload, '$.phase'),
               json_extract(payload, '$.batch'),
               json_extract(payload, '$.sets[' || json_extract(run.value, '$.set_index') || '].role'),
               json_extract(payload, '$.sets[' || json_extract(run.value, '$.set_index') || '].id'),
               json_extract(payload, '$.layouts[' || json_extract(run.value, '$.layout_index') || ']')
        FROM events, json_each(payload, '$.runs') AS run WHERE kind = 'batch_opened'),
    place(id, phase, batch, role, set_id, layout) AS (
        SELECT * FROM planned UNION
        SELECT void.rerun, place.phase, place.batch, place.role, place.set_id, place.layout
        FROM place JOIN void ON void.id = place.id)
    SELECT * FROM place;
CREATE TEMP TABLE counted AS
    SELECT score.*, place.phase, place.batch, place.role, place.set_id, row_number() OVER (ORDER BY score.seq) AS nth
    FROM score JOIN place USING (id) WHERE score.id NOT IN (SELECT id FROM void);
"""
KINDS = ("arrived", "timeout", "contact", "off_floor")
ROLES = ("candidate", "control", "champion", "challenger")


class Truth:
    """Answers by SQL over one ledger."""

    def __init__(self, path: Path) -> None:
        self._connection = sqlite3.connect(f"{path.as_uri()}?mode=ro", uri=True)
        self._connection.executescript(VIEWS)

    def close(self) -> None:
        self._connection.close()

    def rows(self, query: str, *values: Any) -> list[Any]:
        return self._connection.execute(query, values).fetchall()

    def one(self, query: str, *values: Any) -> Any:
        found = self.rows(query, *values)
        return found[0][0] if found else None

    def payloads(self, kind: str) -> list[Any]:
        """Return events of a kind that no void took back."""
        return [
            json.loads(row[0]) for row in self.rows("SELECT payload FROM decision WHERE kind = ? ORDER BY seq", kind)
        ]

    def facts(self) -> dict[str, float]:
        """Return every number that the page may show and SQL can give, under the name the page gives it."""
        begun = self.payloads("session_begun")
        result: dict[str, float] = {"events": self.one("SELECT COUNT(*) FROM events"), "most": 40}
        result["notes"] = self.one("SELECT COUNT(*) FROM events WHERE kind = 'noted'")
        result |= self._counts() | self._voids()
        for row in TABLE:
            result[f"table.{row.name}.low"], result[f"table.{row.name}.high"] = row.low, row.high
        if begun:
            result |= self._recordings(begun[0])
            result |= self._sets(begun[0]) | self._rounds() | self._time(begun[0]) | self._told(begun[0])
            result |= self._narrowed() | self._drift(begun[0])
        return result

    RECORDED = (
        "SELECT json_extract(payload, '$.parameters') AS numbers, json_extract(payload, '$.grade') AS grade,"
        " json_extract(payload, '$.time_limit') AS time_limit, json_extract(payload, '$.model') AS model,"
        " json_extract(one.value, '$.outcome.time') AS time"
        " FROM events, json_each(payload, '$.episodes') AS one WHERE kind = 'evidence_imported'"
    )

    def _conditions(self, begun: Any) -> tuple[Any, ...]:
        told = begun["config"]
        return told["grade"], told["time_limit"], (begun.get("about") or {}).get("model", "")

    def _recordings(self, begun: Any) -> dict[str, float]:
        same = f"({self.RECORDED}) WHERE (grade, time_limit, model) = (?, ?, ?)"
        return {
            "recordings.episodes": self.one(f"SELECT COUNT(*) FROM ({self.RECORDED})"),
            "recordings.sets": self.one(f"SELECT COUNT(DISTINCT numbers) FROM ({self.RECORDED})"),
            "recordings.used": self.one(f"SELECT COUNT(*) FROM {same}", *self._conditions(begun)),
        }

    def _counts(self) -> dict[str, float]:
        result = {"episodes": self.one("SELECT COUNT(*) FROM counted"), "voids": self.one("SELECT COUNT(*) FROM void")}
        result["failures"] = self.one("SELECT COUNT(*) FROM counted WHERE kind <> 'arrived'")
        result["failures_shown"] = min(result["failures"], 200)
        for role in (*ROLES, "all"):
            which = "1" if role == "all" else f"role = '{role}'"
            for kind in KINDS:
                result[f"outcomes.{role}.{kind}"] = self.one(
                    f"SELECT COUNT(*) FROM counted WHERE {which} AND kind = ?", kind
                )
            result[f"outcomes.{role}.void"] = self.one(f"SELECT COUNT(*) FROM void JOIN place USING (id) WHERE {which}")
            result[f"outcomes.{role}.mean_cost"] = self.one(f"SELECT AVG(cost) FROM counted WHERE {which}")
        opened = self.one("SELECT MAX(seq) FROM decision WHERE kind = 'batch_opened'")
        if opened and not self.one("SELECT 1 FROM events WHERE kind = 'session_ended'"):
            batch = self.one("SELECT json_extract(payload, '$.batch') FROM events WHERE seq = ?", opened)
            runs = self.one(
                "SELECT COUNT(*) FROM json_each((SELECT payload FROM events WHERE seq = ?), '$.runs')", opened
            )
            result["open_episodes"] = runs - self.one("SELECT COUNT(*) FROM counted WHERE batch = ?", batch)
        result["search_episodes"] = self.one("SELECT COUNT(*) FROM counted WHERE phase = 'search'")
        result["verdict_episodes"] = result["episodes"] - result["search_episodes"]
        return result

    def _voids(self) -> dict[str, float]:
        voids, episodes = self.one("SELECT COUNT(*) FROM void"), self.one("SELECT COUNT(*) FROM counted")
        result = {"void_share": 100.0 * voids / max(voids + episodes, 1), "episodes_with_voids": voids + episodes}
        for id, floor_s in self.rows("SELECT id, floor_s FROM void"):
            earlier = self.one("SELECT floor_s FROM score WHERE id = ?", id)
            result[f"void.{id}"] = floor_s + (earlier or 0.0)
        ignored = self.rows(
            "SELECT COUNT(*) AS n FROM events WHERE kind = 'report_ignored'"
            " GROUP BY json_extract(payload, '$.reason'), json_extract(payload, '$.source') ORDER BY n DESC"
        )
        result |= {f"ignored.{index}": count for index, (count,) in enumerate(ignored)}
        result["ignored"] = sum(count for (count,) in ignored)
        result["taken_back"] = self.one(
            "SELECT COUNT(*) FROM events JOIN struck ON seq > first AND seq < last WHERE kind IN ('generation_closed',"
            " 'challenger_named', 'pair_compared', 'verdict_reached', 'champion_changed')"
        )
        return result

    def _sets(self, begun: Any) -> dict[str, float]:
        before, changes = begun["champion"], self.payloads("champion_changed")
        after = changes[-1]["parameters"] if changes else None
        if after is None:
            named = self.payloads("challenger_named")
            after = named[-1]["parameters"] if named else None
        result: dict[str, float] = {f"before.{row.name}": before[row.name] for row in TABLE}
        if after is None:
            return result
        for row in TABLE:
            old, new = before[row.name], after[row.name]
            result[f"other.{row.name}"] = new
            result[f"change.{row.name}"] = 100.0 * (new - old) / old if row.scale == "log" else new - old
        return result

    def _rounds(self) -> dict[str, float]:
        named = self.payloads("challenger_named")
        pairs = self.payloads("pair_compared")
        result: dict[str, float] = {"rounds": len(named), "pairs": len(pairs)}
        result["pairs_better"] = sum(pair["champion_cost"] > pair["challenger_cost"] for pair in pairs)
        for item in named:
            key, mine = f"round.{item['round']}", [pair for pair in pairs if pair["round"] == item["round"]]
            off = [pair["champion_cost"] - pair["challenger_cost"] for pair in mine]
            result |= {f"{key}.number": item["round"], f"{key}.pairs": len(mine), f"{key}.alpha": 100.0 * item["alpha"]}
            result[f"{key}.log_threshold"] = math.log(1.0 / item["alpha"])
            result[f"{key}.log_evidence"] = mine[-1]["log_evidence"] if mine else 0.0
            if off:
                result[f"{key}.mean_difference"] = result[f"{key}.signed_difference"] = sum(off) / len(off)
            runs = "FROM counted WHERE role = 'challenger' AND set_id = ?"
            count = result[f"{key}.challenger_runs"] = self.one(f"SELECT COUNT(*) {runs}", item["set_id"])
            result[f"{key}.challenger_failed"] = self.one(
                f"SELECT COUNT(*) {runs} AND kind <> 'arrived'", item["set_id"]
            )
            if count:
                result[f"{key}.rule_of_three"] = 100.0 * min(3.0 / count, 1.0)
        for pair in pairs:
            key = f"pair.{pair['round']}.{pair['pair']}"
            result |= {
                f"{key}.{name}": pair[name]
                for name in ("round", "pair", "champion_cost", "challenger_cost", "log_evidence")
            }
            result[f"{key}.difference"] = pair["champion_cost"] - pair["challenger_cost"]
        return result

    def _time(self, begun: Any) -> dict[str, float]:
        told = begun["config"]
        used = {
            phase: self.one("SELECT TOTAL(floor_s) FROM counted WHERE phase = ?", phase)
            for phase in ("search", "verdict")
        }
        void = self.one("SELECT TOTAL(floor_s) FROM void") + self.one(
            "SELECT TOTAL(floor_s) FROM score WHERE id IN (SELECT id FROM void)"
        )
        other = self.one("SELECT TOTAL(json_extract(payload, '$.seconds')) FROM events WHERE kind = 'floor_time_used'")
        total = used["search"] + used["verdict"] + void + other
        query = f"SELECT AVG(time) FROM ({self.RECORDED}) WHERE (grade, time_limit, model) = (?, ?, ?)"
        recorded = self.one(query, *self._conditions(begun))
        step = (recorded or told["episode_guess_s"]) + told["reset_guess_s"]
        given = told["floor_time_s"]
        reserve = max(told["verdict_share"] * given, 2 * told["least_pairs"] * step)
        search, budget = int(max(given - reserve, 0.0) / step), int(given / step)
        result = {}
        if told["episodes"] is not None:
            budget = told["episodes"]
            search = max(budget - max(int(told["verdict_share"] * budget), 2 * told["least_pairs"]), 0)
            reserve, given = step * (budget - search), step * budget
            result["config.episodes"] = told["episodes"]
        return result | {
            "used.search": used["search"] / 60, "used.verdict": used["verdict"] / 60, "used.void": void / 60,
            "used.other": other / 60, "used.all": total / 60, "floor_time_used": total / 60,
            "used.resets": self.one("SELECT TOTAL(MAX(floor_s - time, 0)) FROM counted") / 60,
            "floor_time_given": told["floor_time_s"] / 60, "floor_time_share": 100.0 * total / told["floor_time_s"],
            "plan.all": given / 60,
            "plan.search": max(given - reserve, 0.0) / 60, "plan.verdict": min(reserve, given) / 60,
            "plan.search_episodes": search, "plan.verdict_episodes": budget - search,
        }  # fmt: skip

    def _told(self, begun: Any) -> dict[str, float]:
        told, yard = begun["config"], (begun.get("about") or {}).get("yard")
        result = {
            f"config.{key}": told[key] for key in ("seed", "rounds", "least_pairs", "layouts", "sigma", "time_limit")
        }
        result |= {f"config.{key}": 100.0 * told[key] for key in ("alpha", "verdict_share")}
        result |= {"config.floor_time": told["floor_time_s"] / 60.0, "config.population": told["population"]}
        result |= {f"lead_in.{number}": stage["time_limit"] for number, stage in enumerate(told["lead_in"])}
        if begun.get("prior"):
            result["prior.episodes"] = begun["prior"]["episodes"]
        if yard:
            result |= {f"plant.{key}": value for key, value in yard["plant"].items()}
            result |= {f"yard.{key}": value for key, value in {**yard["robot"], **yard["arrival"]}.items()}
            (x0, x1), (y0, y1) = yard["floor"]["x"], yard["floor"]["y"]
            result |= {
                "yard.x0": x0,
                "yard.x1": x1,
                "yard.y0": y0,
                "yard.y1": y1,
                "yard.reset_time": yard["reset_time"],
            }
        return result

    def _narrowed(self) -> dict[str, float]:
        result = {}
        opened = [item for item in self.payloads("batch_opened") if item["phase"] == "search"]
        for row in TABLE if len(opened) > 1 else ():
            spans = []
            for batch in (opened[0], opened[-1]):
                values = [item["parameters"][row.name] for item in batch["sets"] if item["role"] == "candidate"]
                top, bottom = max(values), min(values)
                spans.append(math.log(top / bottom) if row.scale == "log" else top - bottom)
            result[f"narrowed.{row.name}"] = 100.0 * spans[1] / spans[0] if spans[0] else math.nan
        return result

    def _drift(self, begun: Any) -> dict[str, float]:
        points = self.rows("SELECT nth, cost FROM counted WHERE role = 'control' AND set_id = ?", begun["champion_id"])
        if len(points) < 6:
            return {}
        x, y = np.array(points, dtype=float).T
        line = stats.linregress(x / 100.0, y)
        return {"drift.slope": line.slope, "drift.error": line.stderr, "drift.episodes": len(points)}
