"""Fields of a settings record as widgets: one for each field, named, explained and checked by the record itself."""

from __future__ import annotations

import types
import typing
from typing import TYPE_CHECKING, Any, Literal, get_args, get_origin

from qtpy.QtCore import Qt, Signal
from qtpy.QtWidgets import QComboBox, QCompleter, QFormLayout, QLabel, QLineEdit, QWidget

if TYPE_CHECKING:
    from collections.abc import Iterable

    from layerscan.settings import Settings

NOT_STATED = "not stated"


class SettingsForm(QWidget):
    """Widgets for some fields of a settings record. ``settings()`` is always a valid record."""

    changed = Signal()

    def __init__(self, kind: type[Settings], names: Iterable[str], parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._kind = kind
        self._settings = kind()
        self._widgets: dict[str, QWidget] = {}
        layout = QFormLayout(self)
        layout.setContentsMargins(4, 4, 4, 4)
        layout.setVerticalSpacing(3)
        layout.setFieldGrowthPolicy(QFormLayout.FieldGrowthPolicy.ExpandingFieldsGrow)
        hints = typing.get_type_hints(kind)
        for name in names:
            field = kind.model_fields[name]
            widget = self._make(name, _choices(hints[name]), field.default)
            widget.setAccessibleName(_title(name))
            widget.setAccessibleDescription(field.description or "")
            widget.setToolTip(field.description or "")
            label = QLabel(_title(name))
            label.setBuddy(widget)
            layout.addRow(label, widget)
            self._widgets[name] = widget
        self.problem = QLabel()
        self.problem.setWordWrap(True)
        self.problem.setVisible(False)
        self.problem.setAccessibleName("What is wrong with the settings")
        layout.addRow(self.problem)

    def _make(self, name: str, choices: tuple[Any, ...] | None, default: Any) -> QWidget:
        if choices is not None:
            box = QComboBox()
            for choice in choices:
                box.addItem(NOT_STATED if choice is None else str(choice), choice)
            box.setCurrentIndex(choices.index(default))
            box.activated.connect(self._read)
            return box
        edit = QLineEdit(_text(default))
        edit.setPlaceholderText(NOT_STATED if default is None else _text(default))
        edit.editingFinished.connect(self._read)
        return edit

    def widget(self, name: str) -> QWidget:
        """The widget of a field."""
        return self._widgets[name]

    def offer(self, name: str, words: list[str]) -> None:
        """Offer words while typing, such as the names of materials."""
        edit = self._widgets[name]
        if isinstance(edit, QLineEdit):
            completer = QCompleter(words, edit)
            completer.setCaseSensitivity(Qt.CaseSensitivity.CaseInsensitive)
            completer.setFilterMode(Qt.MatchFlag.MatchContains)
            edit.setCompleter(completer)

    def settings(self) -> Any:
        """The settings as last valid."""
        return self._settings

    def show_settings(self, settings: Settings) -> None:
        """Show a record, without reporting a change."""
        self._settings = settings
        for name, widget in self._widgets.items():
            value = getattr(settings, name)
            if isinstance(widget, QComboBox):
                widget.setCurrentIndex(widget.findData(value))
            elif isinstance(widget, QLineEdit):
                widget.setText(_text(value))
        self.problem.setVisible(False)

    def _read(self) -> None:
        """Take over what the widgets say; where the record refuses a value, say why and keep the settings before."""
        from layerscan.errors import SettingsError
        from layerscan.settings import change_settings

        changes = {name: self._value(name, widget) for name, widget in self._widgets.items()}
        try:
            settings = change_settings(self._kind, self._settings, changes)
        except SettingsError as error:
            self.problem.setText(str(error))
            self.problem.setVisible(True)
            return
        self.problem.setVisible(False)
        if settings != self._settings:
            self._settings = settings
            self.changed.emit()

    def _value(self, name: str, widget: QWidget) -> Any:
        if isinstance(widget, QComboBox):
            return widget.currentData()
        assert isinstance(widget, QLineEdit)
        text = widget.text().strip()
        default = self._kind.model_fields[name].default
        if not text:
            return default
        hint = typing.get_type_hints(self._kind)[name]
        return text.split(",") if _is_tuple(hint) else text


def _choices(hint: Any) -> tuple[Any, ...] | None:
    """Values of a Literal, with None first where the field may be left open."""
    if get_origin(hint) is Literal:
        return get_args(hint)
    if get_origin(hint) in (typing.Union, types.UnionType):
        members = get_args(hint)
        literal = next((m for m in members if get_origin(m) is Literal), None)
        if literal is not None:
            return (None, *get_args(literal)) if type(None) in members else get_args(literal)
    return None


def _is_tuple(hint: Any) -> bool:
    return get_origin(hint) is tuple or any(get_origin(m) is tuple for m in get_args(hint))


def _title(name: str) -> str:
    return {"poisson_ratio": "Poisson ratio", "lab": "Observed L*, a*, b*"}.get(
        name, name.replace("_", " ").capitalize()
    )


def _text(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, tuple):
        return ", ".join(_text(v) for v in value)
    return f"{value:g}" if isinstance(value, float) else str(value)
