"""Each repository keeps what it was given and finds it again, the same on both databases."""

from __future__ import annotations

from dataclasses import replace

import pytest
from sqlalchemy.exc import IntegrityError

from service.errors import Conflict, NotFound, StaleVersion
from service.ledger import Entry
from service.store.unit_of_work import PLANT, StoredReading, StoredRule
from tests.service.store.examples import judge

PRODUCT = {
    "code": "whole-milk-powder",
    "name": "Whole-milk powder, 26 % fat, für B",
    "external_codes": {"mes": "4711"},
}
BUDGET = {"code": "wmp-moisture-nir", "validated_range": {"lower": 1.5, "upper": 5.5}, "unit": "%"}


@pytest.fixture
def unit(database):
    with database.writing([PLANT, "tower-1", "tower-2"]) as unit:
        yield unit
        unit.commit()  # so that deferred references are checked too


def act(unit, chain=PLANT) -> Entry:
    unit.begin_act()
    return unit.append(chain, "test", "engineer", {})


class TestMaster:
    def test_a_document_is_replaced_and_its_revision_counts_up(self, unit):
        entry = act(unit)
        first = unit.master.put("product", "whole-milk-powder", PRODUCT, entry)
        assert (first.revision, first.document, first.sequence) == (1, PRODUCT, entry.sequence)
        assert unit.master.get("product", "whole-milk-powder") == first
        second = unit.master.put("product", "whole-milk-powder", {**PRODUCT, "name": "WMP"}, act(unit))
        assert (second.revision, second.document["name"]) == (2, "WMP")
        assert unit.master.get("product", "whole-milk-powder") == second
        assert unit.master.get("line", "whole-milk-powder") is None

    def test_lists_are_newest_first_in_pages_and_by_prefix(self, unit):
        for key in ("wmp/moisture", "wmp/fat", "wmp_x/fat", "smp/fat"):
            unit.master.put("characteristic", key, {}, act(unit))
        listed = unit.master.list("characteristic")
        assert [stored.key for stored in listed] == ["smp/fat", "wmp_x/fat", "wmp/fat", "wmp/moisture"]
        page = unit.master.list("characteristic", limit=2, before=(listed[0].sequence, listed[0].key))
        assert page == listed[1:3]
        assert [s.key for s in unit.master.list("characteristic", prefix="wmp/")] == [
            "wmp/fat",
            "wmp/moisture",
        ]
        assert unit.master.list("characteristic", prefix="wm%") == []

    def test_a_name_that_cannot_be_stored_is_the_name_of_nothing(self, unit):
        assert unit.master.get("product", "whole\0milk") is None
        assert unit.master.list("product") == []  # and the transaction goes on


class TestVersions:
    def draft(self, unit, code="wmp-moisture-nir", version=1):
        return unit.versions.insert(
            "budget",
            code,
            version,
            BUDGET,
            act(unit),
            drafted_by="engineer",
            product="whole-milk-powder",
            characteristic="moisture",
        )

    def test_the_life_of_a_version(self, unit):
        draft = self.draft(unit)
        assert unit.versions.open("budget", "wmp-moisture-nir") == draft
        assert unit.versions.in_force("budget", "wmp-moisture-nir") is None
        revised = unit.versions.revise(draft, {**BUDGET, "unit": "g/kg"}, act(unit))
        assert (revised.revision, revised.document["unit"]) == (2, "g/kg")
        submitted = unit.versions.set_state(revised, "submitted", act(unit), submitted_by="engineer")
        entry = act(unit)
        approved = unit.versions.set_state(
            submitted,
            "in_force",
            entry,
            approved_by="approver",
            evaluation={"expanded_uncertainty": 0.139},
            in_force_from=entry.recorded_at,
            lapses_at="2027-01-14T11:00:00.000000Z",
        )
        assert unit.versions.get("budget", "wmp-moisture-nir", 1) == approved
        assert unit.versions.in_force("budget", "wmp-moisture-nir") == approved
        assert unit.versions.open("budget", "wmp-moisture-nir") is None
        assert approved.evaluation == {"expanded_uncertainty": 0.139}
        assert approved.document == revised.document
        assert (approved.submitted_by, approved.sequence) == ("engineer", entry.sequence)

    def test_numbers_and_lists(self, unit):
        assert unit.versions.next_number("budget", "wmp-moisture-nir") == 1
        first = unit.versions.set_state(self.draft(unit), "in_force", act(unit))
        assert unit.versions.next_number("budget", "wmp-moisture-nir") == 2
        second, other = self.draft(unit, version=2), self.draft(unit, code="wmp-fat-nir")
        assert unit.versions.list("budget") == [other, second, first]
        assert unit.versions.list("budget", code="wmp-moisture-nir", state="draft") == [second]
        assert unit.versions.list("budget", product="whole-milk-powder", characteristic="fat") == []
        before = (other.sequence, other.code, other.version)
        assert unit.versions.list("budget", before=before, limit=1) == [second]
        assert unit.versions.all_in_force("budget") == unit.versions.all_in_force() == [first]
        assert unit.versions.all_in_force("specification") == []

    def test_one_version_is_open_and_one_in_force(self, database):
        with database.writing([PLANT]) as unit:
            first = self.draft(unit)
            with pytest.raises(Conflict) as caught:
                self.draft(unit, version=2)
            assert caught.value.code == "open-version-exists"
            unit.versions.set_state(first, "in_force", act(unit))
            second = self.draft(unit, version=2)
            with pytest.raises(IntegrityError):  # the workflow supersedes the first one before
                unit.versions.set_state(second, "in_force", act(unit))

    def test_only_a_drafts_document_changes_and_only_as_it_was_read(self, unit):
        draft = self.draft(unit)
        submitted = unit.versions.set_state(draft, "submitted", act(unit))
        with pytest.raises(StaleVersion):
            unit.versions.revise(draft, {}, act(unit))
        with pytest.raises(Conflict) as caught:
            unit.versions.revise(submitted, {}, act(unit))
        assert caught.value.code == "not-in-this-state"
        with pytest.raises(ValueError, match="document"):
            unit.versions.set_state(submitted, "draft", act(unit), document={})

    def test_unknown_kinds_and_states_are_refused_by_the_database(self, database):
        for kind, state in (("recipe", "draft"), ("budget", "lapsed")):
            with database.writing([PLANT]) as unit, pytest.raises(IntegrityError):
                draft = unit.versions.insert(kind, "x", 1, {}, act(unit), drafted_by="engineer")
                unit.versions.set_state(draft, state, act(unit))


class TestRules:
    def test_rules_are_found_by_their_versions_and_while_both_are_in_force(self, unit):
        def rule(specification_version, counts="2"):
            numbers = {"upper_acceptance_limit": 3.085, "effective_degrees_of_freedom": None}
            return StoredRule("customer-b", specification_version, "moisture", "wmp", 1, counts, numbers)

        rules = [rule(1), rule(1, "2,2"), rule(2)]
        for each in rules:
            unit.rules.add(each)
        assert unit.rules.get("customer-b", 1, "moisture", "wmp", 1, "2,2") == rules[1]
        assert unit.rules.get("customer-b", 1, "moisture", "wmp", 1, "3") is None
        assert unit.rules.for_specification("customer-b", 1) == rules[:2]
        assert unit.rules.for_budget("wmp", 1) == rules
        assert unit.rules.in_force() == []
        specification = unit.versions.insert("specification", "customer-b", 2, {}, act(unit), drafted_by="q")
        unit.versions.set_state(specification, "in_force", act(unit))
        assert unit.rules.in_force() == []
        budget = unit.versions.insert("budget", "wmp", 1, {}, act(unit), drafted_by="q")
        budget = unit.versions.set_state(budget, "in_force", act(unit))
        assert unit.rules.in_force() == [rules[2]]
        unit.versions.set_state(budget, "withdrawn", act(unit))
        assert unit.rules.in_force() == []


class TestStudies:
    def test_studies_are_kept_with_their_evaluation(self, unit):
        names = {"product": "whole-milk-powder", "characteristic": "moisture"}
        first = unit.studies.add(
            "rep-1", {"rows": [["P01", 1, 3.11]]}, {"used": 1}, act(unit), design="r", **names
        )
        second = unit.studies.add("agr-1", {"rows": []}, {"used": 0}, act(unit), design="agreement", **names)
        assert unit.studies.get("rep-1") == first
        assert unit.studies.get("none") is None
        assert unit.studies.list() == unit.studies.list(**names) == [second, first]
        assert unit.studies.list(design="r", product="whole-milk-powder") == [first]
        assert unit.studies.list(before=(second.sequence, "agr-1")) == [first]


class TestDecisionsLotsReadings:
    def test_decisions_are_found_by_id_and_listed_newest_first(self, unit):
        entries = [
            judge(lot, outcome, chain=chain).perform(unit)
            for lot, outcome, chain in (
                ("A", "release", "tower-1"),
                ("B", "hold", "tower-2"),
                ("C", "hold", "tower-1"),
            )
        ]
        found = unit.decisions.get("tower-1.2")
        assert (found.lot, found.outcome, found.round, found.identity) == ("C", "hold", 1, "tower-1.2")
        assert found.entry == entries[2]
        assert found.recorded_at == entries[2].recorded_at
        listed = unit.decisions.list()
        assert [(each.recorded_at, each.chain, each.sequence) for each in listed] == sorted(
            ((each.recorded_at, each.chain, each.sequence) for each in entries), reverse=True
        )
        assert {each.lot for each in unit.decisions.list(outcome="hold")} == {"B", "C"}
        assert [each.lot for each in unit.decisions.list(line="tower-2", product="whole-milk-powder")] == [
            "B"
        ]
        assert [each.lot for each in unit.decisions.list(lot="A")] == ["A"]
        last = listed[0]
        before = (last.recorded_at, last.chain, last.sequence)
        assert unit.decisions.list(before=before, limit=1) == listed[1:2]

    @pytest.mark.parametrize(
        "identity",
        [
            "tower-1.9",
            "tower-1",
            "tower-1.",
            "tower-1.01",
            "tower-1.x",
            "tower-1.9999999999999999999",
            "\0.1",
            "",
        ],
    )
    def test_what_is_no_id_of_a_decision_is_not_found(self, unit, identity):
        judge("A").perform(unit)
        assert unit.decisions.get(identity) is None

    def test_an_entry_that_is_no_decision_is_not_found_as_one(self, unit):
        act(unit, "tower-1")
        assert unit.decisions.get("tower-1.1") is None

    def test_a_round_of_a_lot_is_judged_once(self, database):
        with pytest.raises(IntegrityError), database.writing(["tower-1"]) as unit:
            for _ in range(2):
                entry = act(unit, "tower-1")
                unit.decisions.add(product="p", lot="A", round=1, outcome="hold", entry=entry)
            unit.commit()

    def test_lots_stand_where_their_last_decision_put_them(self, unit):
        judge("A", "hold").perform(unit)
        judge("B", "release").perform(unit)
        entry = act(unit, "tower-2")
        names = {
            "product": "whole-milk-powder",
            "lot": "A",
            "line": "tower-2",
            "outcome": "release",
            "rounds": 2,
        }
        stored = unit.lots.upsert(**names, entry=entry)
        assert unit.lots.get("whole-milk-powder", "A") == stored
        assert (stored.chain, stored.sequence, stored.recorded_at) == ("tower-2", 1, entry.recorded_at)
        assert unit.lots.get("whole-milk-powder", "C") is None
        assert unit.lots.list(outcome="hold") == []
        assert [each.lot for each in unit.lots.list(outcome="release")] == ["A", "B"]
        assert [each.lot for each in unit.lots.list(line="tower-1", product="whole-milk-powder")] == ["B"]
        before = (stored.recorded_at, stored.product, stored.lot)
        assert [each.lot for each in unit.lots.list(before=before)] == ["B"]

    def test_used_readings_are_found_among_many(self, unit):
        entry = act(unit, "tower-1")
        used = [("nir-1", f"2026-03-02T05:12:04.{n:03}Z", "1") for n in range(400)]
        unit.readings.add(used[:3], entry)
        found = unit.readings.find([*used, ("nir-2", used[0][1], "1"), ("nir-1", used[1][1], "2")])
        assert sorted(found, key=lambda each: each.identity) == [
            StoredReading(*identity, "tower-1", entry.sequence) for identity in used[:3]
        ]
        assert unit.readings.find([]) == []

    def test_a_measurement_is_found_by_its_instant_in_its_transaction_and_after_it(self, database):
        named, at = ("nir-1", "m1", "1"), "2026-03-02T05:12:04.120Z"
        with database.writing(["tower-1"]) as unit:
            entry = act(unit, "tower-1")
            unit.readings.add([named, ("nir-1", at, "2")], entry, {named: at})
            stored = StoredReading(*named, "tower-1", entry.sequence, at)
            assert unit.readings.find_taken_at([("nir-1", at, "1")]) == [stored]
            unit.commit()
        with database.reading() as unit:
            instants = [("nir-1", at, "1"), ("nir-1", at, "2"), ("nir-2", at, "1")]
            assert unit.readings.find_taken_at(instants) == [stored]
            assert unit.readings.find([named]) == [stored]

    def test_what_a_transaction_gathered_is_found_in_it_and_after_it(self, database):
        with database.writing(["tower-1"]) as unit:
            judge("A", "hold").perform(unit)
            stored = unit.lots.get("whole-milk-powder", "A")
            assert stored.outcome == "hold"
            second = judge("A", "release")
            with pytest.raises(IntegrityError):  # the same round and reading once more
                second.perform(unit)
                unit.commit()
        with database.writing(["tower-1"]) as unit:
            entry = judge("B", "hold").perform(unit)
            unit.lots.upsert(
                product="whole-milk-powder", lot="B", line="tower-1", outcome="reject", rounds=1, entry=entry
            )
            assert unit.lots.get("whole-milk-powder", "B").outcome == "reject"
            unit.commit()
        with database.reading() as unit:
            assert unit.lots.get("whole-milk-powder", "A") is None
            assert [lot.outcome for lot in unit.lots.list()] == ["reject"]
            taken = ("nir-1", "taken of whole-milk-powder B", "1")
            assert [each.sequence for each in unit.readings.find([taken, taken])] == [entry.sequence]

    def test_the_same_reading_is_never_kept_twice(self, database):
        with pytest.raises(IntegrityError), database.writing(["tower-1"]) as unit:
            unit.readings.add([("nir-1", "m1", "1"), ("nir-1", "m1", "1")], act(unit, "tower-1"))
            unit.commit()

    def test_a_row_cannot_name_an_entry_that_is_not_there(self, database):
        with pytest.raises(IntegrityError), database.writing(["tower-1"]) as unit:
            entry = act(unit, "tower-1")
            missing = Entry("tower-1", 99, entry.previous, entry.recorded_at, "x", "x", b"{}", entry.hash)
            unit.readings.add([("nir-1", "m1", "1")], missing)
            unit.commit()


class TestAccounts:
    def test_people(self, unit):
        roles = ("engineer", "approver")
        person = unit.people.add(
            "k-moor", name="K. Moor", roles=roles, password_hash="$argon2", entry=act(unit)
        )
        assert unit.people.get("k-moor") == person
        assert person.roles == roles
        entry = act(unit)
        disabled = unit.people.change(person, entry, disabled_at=entry.recorded_at, roles=())
        assert unit.people.get("k-moor") == disabled
        assert (disabled.roles, disabled.sequence) == ((), entry.sequence)
        assert unit.people.list() == [disabled]
        assert unit.people.get("nobody") is None

    def test_tokens(self, unit):
        entry = act(unit)
        token = unit.tokens.add("mes", principal="mes", roles=["line"], digest="ab" * 32, entry=entry)
        assert unit.tokens.find_digest("ab" * 32) == unit.tokens.get("mes") == token
        assert (token.created_at, token.revoked_at, token.person) == (entry.recorded_at, None, None)
        revoked = unit.tokens.revoke(token, act(unit))
        assert revoked.revoked_at is not None
        assert unit.tokens.list() == [revoked] == [unit.tokens.find_digest("ab" * 32)]
        assert unit.tokens.find_digest("cd" * 32) is None

    def test_what_is_not_there_cannot_be_changed(self, unit):
        token = unit.tokens.add("mes", principal="mes", roles=[], digest="ab" * 32, entry=act(unit))
        with pytest.raises(NotFound, match="other"):
            unit.tokens.revoke(replace(token, code="other"), act(unit))
