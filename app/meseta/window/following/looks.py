"""One look at a followed folder, off the window's thread: plain functions of what the window hands over."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

from meseta.errors import InputError, MesetaError
from meseta.recipe import Recipe
from meseta.recipe.kept_layouts import KeptLayout
from meseta.window.opening import Opened, opened_study
from meseta.work import Work

if TYPE_CHECKING:
    from meseta.study.following import Following

__all__ = ["Outlook", "begun", "ended", "outlook"]

SHOWN_WAITING = 20


@dataclass(frozen=True)
class Outlook:
    """What a look brought, as the window hears of it.

    Attributes
    ----------
    opened : Opened, optional
        The study as it is now, where recordings were taken in.
    recordings, traces : int
        Taken in since following began.
    words : str
        What is waited for; empty where nothing is.
    waiting : tuple of str
        The first files that wait, each with why; what is wrong where no look is possible.
    bad : tuple of MesetaError
        All files that could not be taken in.
    late : tuple of MesetaError
        What else is told of files for the first time: metadata that came too late.
    unsure : str
        File whose layout must be looked at by the user before a study is made; empty where there is none.
    more : bool
        Whether whole files are left for the next look.
    behind : bool
        Whether something was taken in that cannot be shown: by the settings as they are, no traces can be made.
    """

    opened: Opened | None = None
    recordings: int = 0
    traces: int = 0
    words: str = ""
    waiting: tuple[str, ...] = ()
    bad: tuple[MesetaError, ...] = ()
    late: tuple[MesetaError, ...] = ()
    unsure: str = ""
    more: bool = False
    behind: bool = False


def begun(folder: str, path: str, recipe: Recipe | None, study: object) -> Following:
    """Begin to follow a folder into a study that is open, or that is made of the first files."""
    from meseta.study import Study
    from meseta.study.following import Following

    assert study is None or isinstance(study, Study)
    return Following([folder], Path(path), recipe, study)


def ended(following: Following, *, close_study: bool) -> None:
    """Give free what following holds."""
    following.close()
    if close_study and following.study is not None:
        following.study.close()


def outlook(
    following: Following, agreed: bool, remembered: Mapping[str, KeptLayout], work: Work, *, behind: bool = False
) -> Outlook:
    """Look once.

    Parameters
    ----------
    following : Following
    agreed : bool
        Whether the user has said how files are to be read.
    remembered : mapping of str to KeptLayout
        Layouts that the file check may propose.
    work : Work
    behind : bool
        Whether something of earlier looks is still to be shown.
    """
    agreed = agreed or following.study is not None
    looked = following.look(work, take=agreed)
    if looked.ready and not agreed:
        first = looked.ready[0].path
        if _doubtful(first, following.recipe or Recipe(), remembered, work):
            return Outlook(words=f"how {first.name} is read must be settled first", unsure=str(first))
        looked = following.look(work)
    if looked.trouble is not None:
        return replace(_standing(following), words=looked.words, waiting=(str(looked.trouble),), behind=behind)
    added = looked.added
    opened, words = None, looked.words
    if following.study is not None and (behind or added.sources):
        try:
            opened = opened_study(following.study, work)
        except InputError as error:
            words = f"waiting ({error.what})"
    failed = {str(error) for error in following.total.bad}
    return replace(
        _standing(following),
        opened=opened,
        words=words,
        waiting=tuple(f"{one.file.name}: {one.why}" for one in looked.waiting[:SHOWN_WAITING]),
        late=tuple(error for error in looked.bad if str(error) not in failed),
        more=bool(looked.ready),
        behind=opened is None and (behind or bool(added.sources)),
    )


def _standing(following: Following) -> Outlook:
    total = following.total
    return Outlook(recordings=len(total.sources), traces=total.traces, bad=tuple(total.bad))


def _doubtful(path: Path, recipe: Recipe, remembered: Mapping[str, KeptLayout], work: Work) -> bool:
    """Return whether the user must see a file before files like it are read: it fits no kept layout and has doubts."""
    from meseta.window.filecheck.preview import check_picture

    picture = check_picture([str(path)], recipe, work, remembered)
    if not picture.readable:
        return True
    return not picture.described[0].kept_layout and bool(picture.sentences())
