"""The commit protocol as a state machine: whatever happens to a folder, the end is the same bytes."""

import shutil
import tempfile
from pathlib import Path

from hypothesis import settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, initialize, invariant, precondition, rule

from cohort.execute import shards
from cohort.execute.shards import commit, missing, strays
from cohort.execute.stages import rows, tables
from cohort.study import study_from
from cohort.tables import part_name

SIZE = 16
TEXT = """
seed = 3
[subjects]
count = {count}
[subjects.parameters]
td.lognormal = {{ median = 36, cv = 0.2 }}
[[arms]]
name = "a"
duration = "2 h"
glucose = [ {{ shape = "constant", rate = 180 }} ]
[[arms]]
name = "b"
duration = "2 h"
glucose = [ {{ shape = "meal", time = 10, amount = "40 g", absorption = 40 }} ]
"""


def study_of(count: int):  # type: ignore[no-untyped-def]
    return study_from(TEXT.format(count=count).encode(), Path("x.toml"))


def finish(study, out: Path) -> None:  # type: ignore[no-untyped-def]
    for path in strays(study, out, SIZE):
        path.unlink()
    for work in missing(study, out, SIZE):
        commit(study, out, work, [rows(study, work.shard.first, work.shard.last, work.arms)])


def content(out: Path) -> dict[str, bytes]:
    return {p.relative_to(out).as_posix(): p.read_bytes() for p in out.rglob("*") if p.is_file()}


class Died(BaseException):
    """The process ended here."""


class Folder(RuleBasedStateMachine):
    """Shards are committed, die between writes, are harmed and resumed; a cohort may grow."""

    expected: dict[int, dict[str, bytes]] = {}  # noqa: RUF012 - shared by all examples on purpose

    @initialize()
    def begin(self) -> None:
        self.out = Path(tempfile.mkdtemp())
        self.count = 40

    def teardown(self) -> None:
        shutil.rmtree(self.out, ignore_errors=True)

    def work(self):  # type: ignore[no-untyped-def]
        return missing(study_of(self.count), self.out, SIZE)

    @rule(data=st.data())
    @precondition(lambda self: self.work())
    def commit_one(self, data: st.DataObject) -> None:
        work = data.draw(st.sampled_from(self.work()))
        study = study_of(self.count)
        commit(study, self.out, work, [rows(study, work.shard.first, work.shard.last, work.arms)])

    @rule(data=st.data(), after=st.integers(0, 3))
    @precondition(lambda self: self.work())
    def die_while_committing(self, data: st.DataObject, after: int) -> None:
        work, real, written = data.draw(st.sampled_from(self.work())), shards.write_part, 0
        study = study_of(self.count)

        def dying(path, *words):  # type: ignore[no-untyped-def]
            nonlocal written
            if written == after:
                path.parent.mkdir(parents=True, exist_ok=True)
                (path.parent / f".{path.name}.1.tmp").write_bytes(b"half")
                raise Died
            written += 1
            real(path, *words)

        shards.write_part = dying
        try:
            commit(study, self.out, work, [rows(study, work.shard.first, work.shard.last, work.arms)])
        except Died:
            pass
        finally:
            shards.write_part = real

    @rule(data=st.data(), how=st.sampled_from(["cut", "flip", "remove", "swap"]))
    @precondition(lambda self: list(self.out.rglob("part-*.parquet")))
    def harm(self, data: st.DataObject, how: str) -> None:
        parts = sorted(self.out.rglob("part-*.parquet"))
        part = data.draw(st.sampled_from(parts))
        bytes_ = bytearray(part.read_bytes())
        if how == "remove" or not bytes_:
            part.unlink()
        elif how == "cut":
            part.write_bytes(bytes_[: data.draw(st.integers(0, len(bytes_) - 1))])
        elif how == "flip":
            at = data.draw(st.integers(0, len(bytes_) - 1))
            bytes_[at] ^= 1 << data.draw(st.integers(0, 7))
            part.write_bytes(bytes_)
        else:
            part.write_bytes(data.draw(st.sampled_from(parts)).read_bytes())

    @rule()
    @precondition(lambda self: self.count < 60)
    def grow(self) -> None:
        self.count += 13

    @invariant()
    def what_is_trusted_is_right(self) -> None:
        """Every part that `missing` does not ask for holds exactly what an undisturbed run would hold."""
        if not hasattr(self, "out"):
            return
        right = self.right()
        study = study_of(self.count)
        asked = {(t.folder, w.shard.number) for w in self.work() for t in w.tables}
        for table in tables(study):
            for number in range(-(-self.count // SIZE)):
                name = f"{table.folder}/{part_name(number)}"
                if (table.folder, number) not in asked:
                    alone = self.expected_folder(self.count) / name
                    assert (self.out / name).read_bytes() == alone.read_bytes()
        assert right

    @rule()
    def resume_to_the_end(self) -> None:
        finish(study_of(self.count), self.out)
        found = content(self.out)
        right = self.right()
        assert set(found) == set(right)
        assert all(found[name] == data for name, data in right.items())

    def right(self) -> dict[str, bytes]:
        if self.count not in Folder.expected:
            Folder.expected[self.count] = content(self.expected_folder(self.count))
        return Folder.expected[self.count]

    folders: dict[int, Path] = {}  # noqa: RUF012 - shared by all examples on purpose

    def expected_folder(self, count: int) -> Path:
        if count not in Folder.folders:
            folder = Path(tempfile.mkdtemp())
            finish(study_of(count), folder)
            Folder.folders[count] = folder
        return Folder.folders[count]


TestFolder = Folder.TestCase
TestFolder.settings = settings(max_examples=6, stateful_step_count=8, deadline=None)
