"""The tables of the store, as this version knows them; `migrations` says how each came to be."""

from __future__ import annotations

from sqlalchemy import ForeignKey, ForeignKeyConstraint, Integer, LargeBinary, String, Text
from sqlalchemy.orm import DeclarativeBase, Mapped, mapped_column


class Base(DeclarativeBase):
    pass


class NotebookRow(Base):
    """A notebook. `origin` is the name that its hashes cover: a copy keeps it, so that the chain still holds."""

    __tablename__ = "notebooks"

    id: Mapped[str] = mapped_column(String(32), primary_key=True)
    origin: Mapped[str] = mapped_column(String(32))
    title: Mapped[str] = mapped_column(String(200))
    created_at: Mapped[str] = mapped_column(String(32))
    created_by: Mapped[str] = mapped_column(String(200))
    archived_at: Mapped[str | None] = mapped_column(String(32))
    archived_by: Mapped[str | None] = mapped_column(String(200))
    length: Mapped[int] = mapped_column(Integer)  # entries written: a tail cut off is noticed
    head: Mapped[str] = mapped_column(String(64))  # hash of the last one


class SheetRow(Base):
    """A sheet at work: its state as JSON, its undo history compressed, and the number of times it was saved."""

    __tablename__ = "sheets"

    notebook: Mapped[str] = mapped_column(ForeignKey("notebooks.id"), primary_key=True)
    number: Mapped[int] = mapped_column(Integer, primary_key=True)
    title: Mapped[str] = mapped_column(String(200))
    state: Mapped[str] = mapped_column(Text)
    history: Mapped[bytes] = mapped_column(LargeBinary)
    revision: Mapped[int] = mapped_column(Integer)
    saved_at: Mapped[str] = mapped_column(String(32))
    saved_by: Mapped[str] = mapped_column(String(200))


class EntryRow(Base):
    """An entry: written once. `body` is its canonical JSON, `words` what a search looks through."""

    __tablename__ = "entries"
    __table_args__ = (ForeignKeyConstraint(["notebook"], ["notebooks.id"]),)

    notebook: Mapped[str] = mapped_column(String(32), primary_key=True)
    number: Mapped[int] = mapped_column(Integer, primary_key=True)
    kind: Mapped[str] = mapped_column(String(16))
    at: Mapped[str] = mapped_column(String(32))
    author: Mapped[str] = mapped_column(String(200))
    sheet: Mapped[int | None] = mapped_column(Integer)
    body: Mapped[str] = mapped_column(Text)
    previous: Mapped[str] = mapped_column(String(64))
    sha256: Mapped[str] = mapped_column(String(64))
    words: Mapped[str] = mapped_column(Text)
