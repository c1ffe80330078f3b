"""Which triggers keep record tables append-only, as SQL for each engine.

Frozen: migrations call these functions, so their text never changes; a new rule gets a
new function.
"""

from __future__ import annotations

REFUSAL = "millikeep: records never change"


def sqlite_guards(table: str, keys: tuple[tuple[str, ...], ...]) -> list[str]:
    """Triggers that refuse UPDATE, DELETE and INSERT OR REPLACE.

    Args:
        table: to be guarded.
        keys: each unique key of the table; REPLACE would delete the row that has it
            without firing a DELETE trigger.
    """
    exists = " OR ".join("(" + " AND ".join(f'"{c}" = NEW."{c}"' for c in key) + ")" for key in keys)
    return [
        f'CREATE TRIGGER "{table}_no_update" BEFORE UPDATE ON "{table}" '
        f"BEGIN SELECT RAISE(ABORT, '{REFUSAL}'); END",
        f'CREATE TRIGGER "{table}_no_delete" BEFORE DELETE ON "{table}" '
        f"BEGIN SELECT RAISE(ABORT, '{REFUSAL}'); END",
        f'CREATE TRIGGER "{table}_no_replace" BEFORE INSERT ON "{table}" '
        f'WHEN EXISTS (SELECT 1 FROM "{table}" WHERE {exists}) '
        f"BEGIN SELECT RAISE(ABORT, '{REFUSAL} (a row with this key is there)'); END",
    ]


def postgres_functions() -> list[str]:
    """Functions behind the triggers: refuse, and check what is appended to the journal."""
    return [
        f"""CREATE FUNCTION millikeep_refuse() RETURNS trigger LANGUAGE plpgsql AS $$
        BEGIN RAISE EXCEPTION '{REFUSAL}'; END $$""",
        # SECURITY DEFINER: a recorder needs no right to read the journal for this check.
        """CREATE FUNCTION millikeep_check_entry() RETURNS trigger LANGUAGE plpgsql
        SECURITY DEFINER SET search_path FROM CURRENT AS $$
        BEGIN
          IF NEW.seq <> (SELECT coalesce(max(seq), -1) + 1 FROM journal) THEN
            RAISE EXCEPTION USING MESSAGE = 'millikeep: journal entry ' || NEW.seq || ' is not the next one';
          END IF;
          IF NEW.leaf <> sha256('\\x00'::bytea || convert_to(NEW.entry, 'UTF8')) THEN
            RAISE EXCEPTION USING MESSAGE = 'millikeep: the leaf of journal entry ' || NEW.seq || ' is wrong';
          END IF;
          NEW.recorded_by := session_user;
          RETURN NEW;
        END $$""",
        "CREATE TRIGGER journal_check BEFORE INSERT ON journal FOR EACH ROW "
        "EXECUTE FUNCTION millikeep_check_entry()",
        "ALTER TABLE journal ENABLE ALWAYS TRIGGER journal_check",
    ]


def postgres_guards(table: str) -> list[str]:
    """Triggers that refuse UPDATE, DELETE and TRUNCATE, also in a replica session."""
    statements = []
    for act in ("UPDATE", "DELETE", "TRUNCATE"):
        name = f"{table}_no_{act.lower()}"
        statements.append(
            f'CREATE TRIGGER "{name}" BEFORE {act} ON "{table}" FOR EACH STATEMENT '
            "EXECUTE FUNCTION millikeep_refuse()"
        )
        statements.append(f'ALTER TABLE "{table}" ENABLE ALWAYS TRIGGER "{name}"')
    return statements
