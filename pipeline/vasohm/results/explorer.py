"""The part of an image's page that scripts bring to life: picture, colours, numbers, table, corrections."""

from vasohm.results.colouring import COLOURED
from vasohm.results.markup import Html, html

COLUMNS = (  # of the table: what it is sorted by, its head, whether it holds numbers
    ("segment", "segment", False),
    ("network", "network", True),
    ("class", "class", False),
    ("length", "length (µm)", True),
    ("radius", "hydraulic radius ± se (µm)", True),
    ("viscosity", "viscosity (mPa·s)", True),
    ("resistance", "resistance (Pa·s/m³), 95 % interval", True),
    ("share", "share of the network's resistance", True),
    ("flags", "flags", False),
)
EDITS = (  # of segments, of places: the edit, its value, what stands on the button
    (("drop", "", "Drop"), ("keep", "", "Keep"), ("class", "arteriole", "Arteriole"), ("class", "venule", "Venule")),
    (("crossing", "", "Crossing"), ("branching", "", "Branching")),
)


def explorer() -> Html:
    """Build what is hidden until the page's script shows it."""
    return Html(
        f"""<section id="explore" hidden aria-label="Explore and correct">
<div class="tools">
<label>Colour by <select id="colouring">{_choices()}</select></label>
<span><button type="button" id="nearer">Zoom in</button><button type="button" id="farther">Zoom out</button>
<button type="button" id="whole">Whole picture</button></span>
<label><input type="checkbox" id="places"> Show branchings and crossings</label>
</div>
<div class="explore">
<div>
<div id="view"><div id="figure" tabindex="0" role="group" aria-label="Picture with segments. Plus and minus zoom, arrows
move, 0 shows all; segments can be chosen in the table."></div>
<div id="scale"><span id="scale-words"></span><div id="scale-bar"></div></div>
<div id="tip" aria-hidden="true" hidden></div>
</div>
<p class="small">Turn the wheel or pinch to zoom, drag to move, click a segment to choose it.</p>
</div>
<aside>
<div id="legend"></div>
<div id="chosen" aria-live="polite"></div>
<div><h3>Correct it</h3><div class="tools">{_buttons(0)}</div>
<p class="small">For crossing or branching, show these places and click one.</p>
<div class="tools">{_buttons(1)}</div></div>
<div><h3>Edits</h3><p class="small" id="no-edits">None yet.</p><ul id="edit-list"></ul>
<button type="button" id="download" class="main" disabled>Download the edits file</button>
<p class="small">Lay it beside the image sheet, name it in the column edits_file, and measure again.</p></div>
</aside>
</div>
<h2>Distribution</h2><div id="distribution"></div>
<h2>Segments</h2>
<div class="tools"><label>Only those with <input type="search" id="filter" placeholder="class, flag, network 2"></label>
<span><button type="button" id="before">Before</button><button type="button" id="after">After</button></span>
<span id="range" aria-live="polite"></span></div>
<div id="table-box" tabindex="0" role="region" aria-label="Table of segments"><table><thead><tr>{_heads()}</tr></thead>
<tbody id="rows"></tbody></table></div>
</section>"""
    )


def _choices() -> str:
    words = {name: said for name, (_, said) in COLOURED.items()} | {"flags": "flags"}
    return "".join(f'<option value="{html(name)}">{html(said)}</option>' for name, said in words.items())


def _buttons(which: int) -> str:
    return "".join(
        f'<button type="button" data-edit="{edit}" data-value="{value}" aria-pressed="false" disabled>{said}</button>'
        for edit, value, said in EDITS[which]
    )


def _heads() -> str:
    return "".join(
        f'<th scope="col"{" class=number" if number else ""}><button type="button" data-sort="{key}">{html(said)}'
        "</button></th>"
        for key, said, number in COLUMNS
    )
