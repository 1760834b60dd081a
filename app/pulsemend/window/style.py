"""The look of all controls, made from a theme and a text size: one style sheet for the whole window."""

from __future__ import annotations

from pulsemend.window.theme import Theme

RADIUS_PX = 6


def style_sheet(theme: Theme, text_pt: float) -> str:
    """Write the style sheet.

    Parameters
    ----------
    theme : Theme
        Colours.
    text_pt : float
        Size of ordinary text in points; everything else follows it.
    """
    small = max(6.0, text_pt * 0.88)
    return f"""
    QWidget {{ color: {theme.text}; font-size: {text_pt:.1f}pt; }}
    QMainWindow, QDialog, #desk {{ background: {theme.window}; }}
    QToolTip {{
        background: {theme.panel}; color: {theme.text}; border: 1px solid {theme.line}; padding: 4px;
    }}
    #header, #rail, #statusLine {{ background: {theme.panel}; }}
    #header {{ border-bottom: 1px solid {theme.line}; }}
    #rail {{ border-right: 1px solid {theme.line}; }}
    #statusLine {{ border-top: 1px solid {theme.line}; }}
    QFrame[card="true"] {{
        background: {theme.panel}; border: 1px solid {theme.line}; border-radius: {RADIUS_PX}px;
    }}
    QLabel {{ background: transparent; }}
    QLabel[kind="title"] {{ font-weight: 600; }}
    QLabel[kind="quiet"] {{ color: {theme.quiet}; font-size: {small:.1f}pt; }}
    QLabel[kind="value"] {{ font-weight: 600; }}
    QLabel[kind="attention"] {{ color: {theme.attention}; font-weight: 600; }}
    QScrollArea, QScrollArea > QWidget > QWidget {{ background: transparent; border: none; }}
    QScrollArea {{ border: 2px solid transparent; border-radius: {RADIUS_PX}px; }}
    QScrollArea:focus {{ border-color: {theme.accent}; }}
    #messages {{ border: none; }}
    QPushButton, QToolButton {{
        background: {theme.field}; border: 1px solid {theme.line}; border-radius: {RADIUS_PX}px;
        padding: 4px 10px;
    }}
    QPushButton:hover, QToolButton:hover {{ border-color: {theme.accent}; }}
    QPushButton:pressed, QToolButton:pressed, QPushButton:checked, QToolButton:checked {{
        background: {theme.accent_soft}; border-color: {theme.accent}; color: {theme.accent};
    }}
    QPushButton:disabled, QToolButton:disabled {{ color: {theme.quiet}; background: {theme.window}; }}
    QPushButton[kind="main"] {{
        background: {theme.accent}; color: {theme.panel}; border-color: {theme.accent}; font-weight: 600;
    }}
    QPushButton[kind="main"]:disabled {{
        background: {theme.field}; color: {theme.quiet}; border-color: {theme.line};
    }}
    QToolButton[kind="plain"] {{ background: transparent; border-color: transparent; padding: 3px 6px; }}
    QToolButton[kind="plain"]:hover {{ border-color: {theme.line}; }}
    QLineEdit, QAbstractSpinBox, QComboBox, QPlainTextEdit, QTextBrowser {{
        background: {theme.field}; border: 1px solid {theme.line};
        border-radius: {RADIUS_PX}px; padding: 3px 6px;
        selection-background-color: {theme.accent}; selection-color: {theme.panel};
    }}
    QComboBox QAbstractItemView {{ background: {theme.panel}; border: 1px solid {theme.line}; }}
    QPushButton:focus, QToolButton:focus, QLineEdit:focus, QAbstractSpinBox:focus, QComboBox:focus,
    QAbstractItemView:focus, QPlainTextEdit:focus, QTextBrowser:focus {{ border: 2px solid {theme.accent}; }}
    QPushButton[kind="main"]:focus, QPushButton:checked:focus, QToolButton:checked:focus {{
        border: 2px solid {theme.text};
    }}
    QRadioButton:focus, QCheckBox:focus {{ color: {theme.accent}; text-decoration: underline; }}
    QAbstractItemView {{
        background: {theme.panel}; alternate-background-color: {theme.window}; border: 1px solid {theme.line};
        border-radius: {RADIUS_PX}px; gridline-color: {theme.line};
        selection-background-color: {theme.accent_soft}; selection-color: {theme.text};
    }}
    QHeaderView::section {{
        background: {theme.panel}; color: {theme.quiet}; border: none; border-bottom: 1px solid {theme.line};
        padding: 3px 6px; font-size: {small:.1f}pt;
    }}
    QRadioButton::indicator, QCheckBox::indicator {{
        width: 12px; height: 12px; border: 1px solid {theme.quiet}; background: {theme.field};
    }}
    QRadioButton::indicator {{ border-radius: 7px; }}
    QCheckBox::indicator {{ border-radius: 3px; }}
    QRadioButton::indicator:checked {{
        width: 6px; height: 6px; border: 4px solid {theme.accent}; background: {theme.field};
    }}
    QListView::indicator {{
        width: 12px; height: 12px; border: 1px solid {theme.quiet}; border-radius: 3px;
        background: {theme.field};
    }}
    /* Checked is a box in a box, so that the colour does not stand alone. */
    QCheckBox::indicator:checked, QListView::indicator:checked {{
        width: 8px; height: 8px; padding: 2px; border-radius: 2px; border: 1px solid {theme.accent};
        background: {theme.accent}; background-clip: content; background-origin: content;
    }}
    QRadioButton::indicator:disabled, QCheckBox::indicator:disabled {{ border-color: {theme.line}; }}
    QCheckBox::indicator:checked:disabled {{ background-color: {theme.quiet}; }}
    QAbstractSpinBox::up-button, QAbstractSpinBox::down-button {{ width: 0; border: none; }}
    QComboBox::drop-down {{ border: none; width: 20px; }}
    QComboBox::down-arrow {{
        width: 0; height: 0; border-left: 4px solid {theme.field}; border-right: 4px solid {theme.field};
        border-top: 6px solid {theme.quiet};
    }}
    QMenuBar, QMenu {{ background: {theme.panel}; }}
    QMenuBar::item:selected, QMenu::item:selected {{
        background: {theme.accent_soft}; color: {theme.accent};
    }}
    QMenu {{ border: 1px solid {theme.line}; }}
    QMenu::item {{ padding: 4px 24px 4px 24px; }}
    QMenu::item:disabled {{ color: {theme.quiet}; }}
    QMenu::separator {{ height: 1px; background: {theme.line}; margin: 4px 8px; }}
    QProgressBar {{
        background: {theme.field}; border: 1px solid {theme.line}; border-radius: 4px; text-align: center;
        max-height: 14px;
    }}
    QProgressBar::chunk {{ background: {theme.accent}; border-radius: 3px; }}
    QSplitter::handle {{ background: {theme.window}; }}
    QSplitter::handle:hover {{ background: {theme.accent_soft}; }}
    QScrollBar:vertical {{ background: transparent; width: 10px; margin: 0; }}
    QScrollBar:horizontal {{ background: transparent; height: 10px; margin: 0; }}
    QScrollBar::handle {{
        background: {theme.line}; border-radius: 4px; min-height: 24px; min-width: 24px; margin: 1px;
    }}
    QScrollBar::handle:hover {{ background: {theme.quiet}; }}
    QScrollBar::add-line, QScrollBar::sub-line {{ width: 0; height: 0; }}
    QScrollBar::add-page, QScrollBar::sub-page {{ background: transparent; }}
    """
