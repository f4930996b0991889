"""The page in a real browser: what it computes, how it is used, and who can use it."""

from __future__ import annotations

import base64
import json
import time
from dataclasses import replace
from io import BytesIO

import numpy as np
import pytest
from PIL import Image

from seedaudit.report.explorer import LARGEST_PAGE, explorer_page
from seedaudit.report.slices import DIRECTIONS, body_frame
from seedaudit.space.grid import Grid, VoxelSet
from tests.browser.pages import CLOSING, EVIL, explorable, invented_claims, whole_brain
from tests.reference import classes_stage
from tests.reference import dice as reference_dice
from tests.report.invented import invented_audit, invented_seed
from tests.test_against_reference import both

ERROR = 0.02
BENCH = "window.explorer.bench"


def page_of(seed):
    return explorer_page(seed, invented_audit(seed))


@pytest.fixture(scope="module")
def study(tmp_path_factory):
    """A real audit on an oblique grid stored flipped and permuted, and the naive reference."""
    return both(
        tmp_path_factory.mktemp("study"), participants=8, flip=(True, False, True),
        permute=(2, 0, 1),
    )  # fmt: skip


@pytest.fixture(scope="module")
def study_page(study):
    return explorer_page(study.result.seeds[0], study.result)


@pytest.fixture(scope="module")
def plain_page():
    return page_of(explorable(invented_seed(count=30)))


def numbers_of(page, array):
    """A typed array of the page; as base64 of 32-bit floats, which is faster than JSON."""
    text = page.evaluate(
        f"() => {{ const bytes = new Uint8Array(new Float32Array({array}).buffer); let text = '';"
        "for (let i = 0; i < bytes.length; i += 8192) "
        "text += String.fromCharCode(...bytes.subarray(i, i + 8192)); return btoa(text); }"
    )
    return np.frombuffer(base64.b64decode(text), "<f4")


def voxels_of(seed):
    mask = seed.maps["analysis_mask"]
    return VoxelSet.from_mask(Grid(mask.shape, mask.affine), np.asarray(mask.dataobj) > 0)


def test_maps_at_drawn_placements(study, study_page, opened):
    """Every value, Dice and spatial r against the naive float64 implementation."""
    seed = study.result.seeds[0]
    analysis = np.isin(study.order, study.reference["rows"])
    expected = study.reference["group"]["effect"][:, study.order[analysis]]
    stated = seed.placement_maps.error
    assert stated < ERROR
    drawn = len(seed.tables["similarity"])
    with opened(study_page) as page:
        for row in (0, 1, drawn // 2, drawn - 1):
            page.evaluate(f"{BENCH}.goTo({row})")
            values = numbers_of(page, f"{BENCH}.values")
            np.testing.assert_allclose(values, expected[row], atol=stated + 1e-4)
            found = page.evaluate(f"{BENCH}.found")
            r = np.corrcoef(expected[0], expected[row])[0, 1]
            np.testing.assert_allclose(found["r"], r, atol=5e-3)
            cut = page.evaluate(f"{BENCH}.cut.value")
            classes = classes_stage(study.reference, "effect", cut)
            # only voxels nearer to the cut than the stated error can be on its other side
            unsure = (np.abs(np.abs(expected[[0, row]]) - cut) <= stated + 1e-4).sum()
            for dice, size, tail in zip(found["dice"], found["sizes"], (1, -1), strict=True):
                truth = reference_dice(classes[0], classes[row], tail)
                assert abs(size - (classes[row] == tail).sum()) <= unsure
                total = (classes[0] == tail).sum() + (classes[row] == tail).sum()
                assert abs(dice - truth) <= 4 * unsure / max(total, 1)
            # and exactly what the numbers that the page holds give
            own = numbers_of(page, f"{BENCH}.reported")
            sides = [np.sign(x) * (np.abs(x) >= np.float32(cut)) for x in (own, values)]
            for dice, tail in zip(found["dice"], (1, -1), strict=True):
                np.testing.assert_allclose(dice, reference_dice(*sides, tail), atol=1e-9)
            rule = seed.tables["similarity"].iloc[row]
            assert (
                page.text_content("#rule-positive")
                == f"{np.floor(rule.dice_positive * 100 + 1e-9) / 100:.2f}"
            )
            assert f"{rule.n_positive:,}" == page.text_content("#rule-n-positive")


def test_region_bars_follow(study, study_page, opened):
    seed = study.result.seeds[0]
    effects = study.reference["group"]["effect"][:, study.order]
    labels = np.asarray(seed.maps["region_labels"].dataobj)[tuple(study.plan.voxels.ijk.T)]
    labels[~np.isin(study.order, study.reference["rows"])] = 0
    with opened(study_page) as page:
        page.evaluate(f"{BENCH}.goTo(3)")
        means = page.evaluate(f"{BENCH}.regionMeans")
        shown = page.locator("#bars output").all_text_contents()
    for mean, text, index in zip(means, shown, seed.tables["regions"]["index"], strict=True):
        members = labels == index
        if not members.any():
            assert mean is None
            assert text == "n/a"
            continue
        expected = effects[3, members].mean()
        assert abs(mean - expected) < seed.placement_maps.error
        assert abs(float(text.replace("−", "-")) - mean) <= 0.005 + 1e-9


def test_share_cut_takes_the_strongest_voxels(study_page, opened):
    with opened(study_page) as page:
        page.evaluate(f"{BENCH}.goTo(2)")
        page.check("#by-share")
        values = np.abs(numbers_of(page, f"{BENCH}.values"))
        for share in (1, 7, 20, 35, 44, 50):
            page.evaluate(f"document.getElementById('cut-share').value = {share}")
            page.evaluate(f"{BENCH}.update()")
            cut = page.evaluate(f"{BENCH}.cuts[0]")
            assert (values >= np.float32(cut)).sum() == np.floor(share / 100 * len(values) + 0.5)


@pytest.mark.parametrize("count", [0, 1, 4, 6])
def test_any_number_of_components_adds_up(count, opened):
    seed = explorable(invented_seed(count=12))
    kept = seed.placement_maps.first(count)
    with opened(page_of(replace(seed, placement_maps=kept))) as page:
        assert len(page.evaluate("window.explorer.study.maps.steps")) == count + 1
        page.evaluate(f"{BENCH}.goTo(5)")
        values = numbers_of(page, f"{BENCH}.values")
    np.testing.assert_allclose(values, kept.maps()[5], atol=1e-5)


def test_slices_show_the_voxel_that_holds_each_point(study, study_page, opened):
    """On an oblique grid stored flipped and permuted: world millimetres, left on the left."""
    seed = study.result.seeds[0]
    voxels = voxels_of(seed)
    frame = body_frame(seed)
    look = np.add(seed.summary["at_mm"], [4.3, -3.1, 5.7])
    with opened(study_page) as page:
        page.evaluate(f"{BENCH}.lookAt({look.tolist()})")
        for number, (along, up, through) in enumerate(DIRECTIONS.values()):
            slice_ = f"{BENCH}.slices[{number}]"
            width, height, step = page.evaluate(f"[{slice_}.width, {slice_}.height, {slice_}.step]")
            rows = numbers_of(page, f"{slice_}.rows").reshape(height, width)
            points = np.empty((height, width, 3))
            points[..., along] = frame[0, along] + (np.arange(width) + 0.5) * step
            points[..., up] = frame[1, up] - (np.arange(height)[:, None] + 0.5) * step
            points[..., through] = look[through]
            expected = voxels.rows_at(voxels.grid.voxel_of(points))
            assert (expected >= 0).any()
            # a point on a face may go to either side
            assert (rows != expected).mean() < 0.001


def test_between_placements_it_blends_and_says_so(study, study_page, opened):
    seed = study.result.seeds[0]
    maps = seed.placement_maps.maps()
    at = np.array(seed.summary["at_mm"])
    with opened(study_page) as page:
        page.evaluate(f"{BENCH}.moveTo({np.add(at, [1.1, -0.7, 0.4]).tolist()})")
        blend = page.evaluate(f"{BENCH}.blend")
        values = numbers_of(page, f"{BENCH}.values")
        assert "blend of the" in page.text_content("#seed-source")
        assert page.text_content("#rule-positive") == "–"
        coarse, fine = (largest_step(page, at, step) for step in (0.02, 0.005))
        page.evaluate(f"{BENCH}.goTo(1)")
        assert page.text_content("#seed-source") == "At placement 1, not blended."
    shares = np.array([one["share"] for one in blend])
    assert 1 < len(blend) <= 6
    np.testing.assert_allclose(shares.sum(), 1)
    assert (np.diff([one["gap"] for one in blend]) >= 0).all()
    assert (shares >= 0).all()
    expected = shares @ maps[[one["row"] for one in blend]]
    np.testing.assert_allclose(values, expected, atol=1e-5)
    # nothing jumps: a quarter of the way, about a quarter of the change
    assert fine < 0.5 * coarse


def largest_step(page, at, step):
    """Largest change of any placement's share between neighbouring places on a line, in mm."""
    return page.evaluate(
        f"""() => {{
            const bench = {BENCH};
            let [before, most] = [null, 0];
            for (let x = 0.5; x < 3.5; x += {step}) {{
                bench.moveTo([{at[0]} + x, {at[1]} + 0.2, {at[2]}]);
                const shares = new Float64Array(bench.study.placements.length);
                for (const one of bench.blend) shares[one.row] = one.share;
                if (before) shares.forEach((share, k) => {{
                    most = Math.max(most, Math.abs(share - before[k]));
                }});
                before = shares;
            }}
            return most;
        }}""".replace("bench.study", "window.explorer.study")
    )


def place(page):
    return np.array(
        page.evaluate(f"{BENCH}.seed.map((value, axis) => value - window.explorer.study.at[axis])")
    )


def test_keyboard(plain_page, opened):
    with opened(plain_page) as page:
        page.focus("#pad")
        for key, expected in (
            ("ArrowRight", [0.5, 0, 0]), ("ArrowUp", [0.5, 0.5, 0]), ("PageUp", [0.5, 0.5, 0.5]),
            ("Shift+ArrowLeft", [-1.5, 0.5, 0.5]), ("PageDown", [-1.5, 0.5, 0]),
            ("ArrowDown", [-1.5, 0, 0]), ("Home", [0, 0, 0]),
        ):  # fmt: skip
            page.keyboard.press(key)
            np.testing.assert_allclose(place(page), expected, atol=1e-9, err_msg=key)
        for _ in range(60):
            page.keyboard.press("ArrowLeft")
        reach = page.evaluate(f"{BENCH}.reach")
        np.testing.assert_allclose(np.linalg.norm(place(page)), reach)
        # only where the seed comes to rest is spoken, half a second later
        words = f"{reach:.1f} mm from the reported centre"
        page.locator("#spoken", has_text=words).wait_for(state="attached")
        page.focus("#slice-axial")
        before = page.evaluate(f"{BENCH}.look")
        page.keyboard.press("ArrowUp")
        page.keyboard.press("PageUp")
        after = page.evaluate(f"{BENCH}.look")
        edge = page.evaluate("window.explorer.study.edge")
        np.testing.assert_allclose(np.subtract(after, before), [0, edge, edge])
        page.focus("#next")
        page.keyboard.press("Enter")
        distances = page.evaluate("window.explorer.study.placements.map((one) => one.distance)")
        assert page.evaluate(f"{BENCH}.at") >= 0
        page.click("#home")
        page.click("#next")
        np.testing.assert_allclose(np.linalg.norm(place(page)), sorted(distances)[1], rtol=1e-6)


def centre(page, selector):
    box = page.locator(selector).bounding_box()
    return box["x"] + box["width"] / 2, box["y"] + box["height"] / 2, box["width"]


def test_pointer_touch_and_points_of_charts(plain_page, opened):
    with opened(plain_page, has_touch=True) as page:
        x, y, width = centre(page, "#pad")
        half = page.evaluate(f"{BENCH}.pad.half")
        page.mouse.move(x, y)
        page.mouse.down()
        page.mouse.move(x + width / 8, y - width / 16, steps=4)
        np.testing.assert_allclose(place(page), [half / 4, half / 8, 0], atol=0.05)
        page.mouse.up()
        page.mouse.move(x, y)
        np.testing.assert_allclose(place(page), [half / 4, half / 8, 0], atol=0.05)
        touch = page.context.new_cdp_session(page)
        for kind, points in (
            ("touchStart", [{"x": x, "y": y}]),
            ("touchMove", [{"x": x - width / 8, "y": y}]),
            ("touchEnd", []),
        ):
            touch.send("Input.dispatchTouchEvent", {"type": kind, "touchPoints": points})
        np.testing.assert_allclose(place(page), [-half / 4, 0, 0], atol=0.05)
        page.locator(".mark[data-placement='4']").first.dispatch_event("click")
        assert page.evaluate(f"{BENCH}.at") == 4
        assert page.locator(".mark.here").count() == 3
        page.select_option("#placement", "7")
        assert page.evaluate(f"{BENCH}.at") == 7
        dot = page.locator("#pad .dot").nth(9).bounding_box()
        page.mouse.click(dot["x"] + dot["width"] / 2, dot["y"] + dot["height"] / 2)
        assert page.evaluate(f"{BENCH}.at") >= 0
        x, y, width = centre(page, "#slice-sagittal")
        page.mouse.click(x, y)
        look = page.evaluate(f"{BENCH}.look")
        frame = np.array(page.evaluate("window.explorer.study.frame"))
        np.testing.assert_allclose(look[1:], frame.mean(axis=0)[1:], atol=0.5)


def test_pairs_stand_where_their_numbers_say(plain_page, opened):
    seed = explorable(invented_seed(count=30))
    drawn = seed.tables["similarity"].iloc[1:].sort_values("distance", kind="stable")
    names = drawn["placement"].tolist()
    pairs = seed.tables["pairs"].set_index(["placement_a", "placement_b"])
    with opened(plain_page) as page:
        page.select_option("#pairs-measure", "dice_negative")
        page.locator("#pairs-map").scroll_into_view_if_needed()
        box = page.locator("#pairs-map").bounding_box()
        for column, row in ((3, 10), (29, 0), (12, 28)):
            x = box["x"] + box["width"] * (column + 0.5) / 30
            y = box["y"] + box["height"] * (row + 0.5) / 30
            page.mouse.move(x, y)
            a, b = names[row], names[column]
            value = pairs.loc[(min(a, b), max(a, b)), "dice_negative"]
            told = page.text_content("#pairs-here")
            assert told.startswith(f"Placements {a} and {b}: ")
            assert abs(float(told.split(": ")[1]) - value) < 0.0075
        page.mouse.click(x, y)
        at = page.evaluate(f"{BENCH}.at")
        assert page.evaluate(f"window.explorer.study.placements[{at}].name") == names[28]


def pixels(page):
    """Red, green, blue and opacity of the axial slice, 0 to 255."""
    text = page.evaluate(f"{BENCH}.slices[2].canvas.toDataURL().split(',')[1]")
    return np.asarray(Image.open(BytesIO(base64.b64decode(text))))


def test_tail_threshold_and_view_are_live(plain_page, opened):
    with opened(plain_page) as page:
        page.uncheck("#outline")
        both_tails = pixels(page)
        sizes = page.text_content("#live-n-positive")
        page.check("[name=tail][value=plus]")
        plus = pixels(page)
        page.check("[name=tail][value=minus]")
        minus = pixels(page)
        assert (plus != both_tails).any()
        assert (minus != both_tails).any()
        assert (plus != minus).any()
        page.check("[name=tail][value=both]")
        page.fill("#cut-effect", "0.05")
        assert int(page.text_content("#live-n-positive").replace(",", "")) > int(
            sizes.replace(",", "")
        )
        page.select_option("#view", "share")
        assert "share" in page.text_content("#key-unit")
        assert (pixels(page) != both_tails).any()


def test_dark_scheme_and_print(plain_page, opened, tmp_path):
    with opened(plain_page, color_scheme="dark") as page:
        paper = "getComputedStyle(document.body).backgroundColor"
        assert page.evaluate(paper) == "rgb(21, 23, 27)"
        dark = pixels(page)
        corner = dark[0, 0]
        assert corner[:3].max() < 60
        page.emulate_media(color_scheme="light")
        assert page.evaluate(paper) == "rgb(255, 255, 255)"
        assert (pixels(page)[0, 0, :3] == 255).all()
        page.emulate_media(color_scheme="dark")
        page.evaluate("dispatchEvent(new Event('beforeprint'))")
        assert (pixels(page)[0, 0, :3] == 255).all()
        page.evaluate("dispatchEvent(new Event('afterprint'))")
        page.pdf(path=tmp_path / "page.pdf", format="A4")
        content = (tmp_path / "page.pdf").read_bytes()
    assert content.startswith(b"%PDF")
    assert 3 <= content.count(b"/Type /Page\n") <= 12


def shown_width(page):
    return page.evaluate("document.documentElement.scrollWidth")


def test_hostile_labels_are_text(opened):
    names = [EVIL, CLOSING, '" onmouseover="alert(3)', "{{ 7 * 7 }}", "x" * 90]
    seed = explorable(invented_seed(names=names, count=12), claims=invented_claims("posterior"))
    hostile = invented_audit(seed)
    object.__setattr__(hostile, "title", EVIL)
    text = explorer_page(seed, hostile)
    with opened(text) as page:
        alerts = []
        page.on("dialog", lambda dialog: alerts.append(dialog.message))
        listed = page.locator("#regions tbody th").all_text_contents()
        bars = page.locator(".bar-name").all_text_contents()
        claims = page.locator("#claims").inner_text()
        assert listed == names
        assert bars == names
        assert EVIL in claims
        assert CLOSING in claims
        assert EVIL in page.title()
        assert page.locator("img").count() == 0
        page.set_viewport_size({"width": 360, "height": 800})
        assert shown_width(page) == 360
    assert alerts == []


@pytest.mark.parametrize("kind", ["plain", "study"])
def test_phone_width_without_sideways_scroll(kind, plain_page, study_page, opened):
    text = plain_page if kind == "plain" else study_page
    with opened(text, width=360, height=740, has_touch=True, is_mobile=True) as page:
        assert shown_width(page) == 360
        wide = page.evaluate(
            "[...document.querySelectorAll('body *:not(.unseen, .skip, .unseen *)')]"
            ".filter((node) => node.getBoundingClientRect().right > 361)"
            ".map((node) => node.outerHTML.slice(0, 90))"
        )
        assert wide == []


def two_radii():
    """Every other placement has a larger sphere."""
    seed = invented_seed(count=12)
    table = seed.tables["placements"].copy()
    table["radius"] = np.where(table["placement"] % 2, 6.0, 9.0)
    table.loc[0, "radius"] = 6.0
    return replace(seed, tables={**seed.tables, "placements": table})


ODD = {
    "one region": lambda: explorable(invented_seed(names=["only"], count=12)),
    "no regions": lambda: explorable(invented_seed(names=[], count=12)),
    "three participants": lambda: explorable(invented_seed(participants=3, count=12)),
    "one participant": lambda: explorable(invented_seed(participants=1, count=12)),
    "no negative tail": lambda: explorable(invented_seed(negative=False, count=12)),
    "nothing found": lambda: explorable(invented_seed(nothing=True, contested=False, count=12)),
    "two placements": lambda: explorable(invented_seed(count=2)),
    "two radii": lambda: explorable(two_radii()),
    "no placement maps": lambda: replace(explorable(invented_seed(count=12)), placement_maps=None),
}


@pytest.mark.parametrize("kind", ODD)
def test_odd_results_have_a_page(kind, opened):
    with opened(page_of(ODD[kind]())) as page:
        assert page.locator("main > section").count() == 12
        empty = page.evaluate(
            "[...document.querySelectorAll('main > section')]"
            ".filter((part) => part.innerText.trim().split('\\n').length < 2)"
            ".map((part) => part.id)"
        )
        assert empty == []
        text = page.locator("main").inner_text()
        assert "The study makes no claims" in text
        assert "NaN" not in text
        assert "undefined px" not in text
        if kind == "no regions":
            assert "The study named no regions" in text
        if kind == "no placement maps":
            assert "cannot be moved" in text
        else:
            page.evaluate(f"{BENCH}.goTo(1)")
            page.evaluate(f"{BENCH}.moveTo([-7, -55, 29])")
            assert page.text_content("#live-r") not in ("", "NaN")
        if kind == "two radii":
            page.evaluate(f"{BENCH}.goTo(2)")
            page.evaluate(f"{BENCH}.moveTo([-7, -55, 29])")
            rows = page.evaluate(f"{BENCH}.blend.map((one) => one.row)")
            assert all(row and row % 2 == 0 for row in rows)
            assert "radius 9 mm" in page.locator("#placement").inner_text()
        if kind == "no negative tail":
            assert page.text_content("#live-n-negative") != ""


def test_sorting_and_copying(plain_page, opened):
    with opened(plain_page, permissions=["clipboard-read", "clipboard-write"]) as page:
        head = page.locator("#regions th button", has_text="stability")
        head.click()
        values = [float(x) for x in page.locator("#regions tbody td:nth-child(6)").evaluate_all(
            "(cells) => cells.map((cell) => cell.dataset.value).filter((text) => text)"
        )]  # fmt: skip
        assert values == sorted(values)
        assert page.locator("#regions th[aria-sort=ascending]").count() == 1
        head.click()
        again = page.locator("#regions tbody td:nth-child(6)").first.get_attribute("data-value")
        assert float(again) == max(values)
        page.click("#copy")
        page.locator("#copied", has_text=".").wait_for()
        if page.text_content("#copied") == "Copied.":
            copied = page.evaluate("navigator.clipboard.readText()")
            assert copied.strip() == page.text_content("#methods-text").strip()


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_automatic_accessibility_check(scheme, study_page, axe, opened):
    """axe-core: nothing serious or critical."""
    with opened(study_page, color_scheme=scheme) as page:
        page.evaluate(axe)
        found = page.evaluate("axe.run()")
    serious = [
        (rule["id"], [node["html"][:160] for node in rule["nodes"]][:3])
        for rule in found["violations"]
        if rule["impact"] in ("serious", "critical")
    ]
    assert serious == []
    assert len(found["passes"]) > 20


@pytest.mark.parametrize("width", [1300, 900, 390])
def test_the_bars_of_the_regions_end_within_their_cells(plain_page, opened, width):
    with opened(plain_page) as page:
        page.set_viewport_size({"width": width, "height": 900})
        ends = page.evaluate(
            "[...document.querySelectorAll('td.with-bar')].map(cell => ["
            "cell.querySelector('.bar').getBoundingClientRect().right,"
            "cell.getBoundingClientRect().right])"
        )
    assert ends
    assert all(bar < cell for bar, cell in ends), ends


def test_a_whole_brain_at_2_mm(opened):
    """Below 8 MB, and every move within 50 ms: what the page computes and draws, by its clock."""
    seed = whole_brain()
    text = page_of(seed)
    assert len(text.encode()) < LARGEST_PAGE == 8_000_000
    with opened(text) as page:
        assert page.evaluate("window.explorer.study.voxels") == 235_375
        stated = page.evaluate("window.explorer.study.maps.error")
        assert f"{stated:.4f}".rstrip("0") in page.locator(".small-print").inner_text()
        taken = []
        at = np.array(seed.summary["at_mm"])
        for step in range(25):
            shift = [0.2 * step, -0.15 * step, 0.1 * step]
            page.evaluate(f"{BENCH}.moveTo({(at + shift).tolist()})")
            taken.append(page.evaluate(f"{BENCH}.milliseconds"))
            time.sleep(0.01)
        page.evaluate(f"{BENCH}.goTo(50)")
        values = numbers_of(page, f"{BENCH}.values")
        page.check("#by-share")
        page.evaluate(f"document.getElementById('cut-share').value = 10, {BENCH}.update()")
        cut = page.evaluate(f"{BENCH}.cuts[0]")
    np.testing.assert_allclose(values, seed.placement_maps.maps()[50], atol=1e-5)
    assert (np.abs(values) >= np.float32(cut)).sum() == 23_538
    # the first moves are compiled while they run
    assert np.median(taken[5:]) < 50, json.dumps(taken)
