"""The pages in a browser: opened, printed, attacked. Skipped where Debian's chromium is not installed."""

import re
import shutil
import subprocess

import pytest
from report.made_study import make_summary
from report.test_pages import ATTACKS

from layerscan.report.study_page import write_study_page

CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser")
FLAGS = ("--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
         "--disable-background-networking", "--disable-component-update", "--disable-sync")  # fmt: skip

pytestmark = pytest.mark.skipif(CHROMIUM is None, reason="needs chromium (apt-get install chromium)")


def run(folder, *options):
    profile = folder / "profile"
    command = [CHROMIUM, *FLAGS, f"--user-data-dir={profile}", "--virtual-time-budget=4000", *options]
    return subprocess.run(command, capture_output=True, text=True, timeout=120, check=True).stdout


@pytest.fixture(scope="module")
def attacked(tmp_path_factory):
    """A page whose every text tries to run a script that changes the title."""
    folder = tmp_path_factory.mktemp("attacked")
    path = write_study_page(folder / "report.html", make_summary(text="".join(ATTACKS)))
    return folder, path


def test_script_in_names_and_metadata_does_not_run(attacked):
    # each attack would change document.title; the page as the browser built it must not hold the change
    folder, path = attacked
    dom = run(folder, "--dump-dom", path.as_uri())
    title = re.search(r"<title>(.*?)</title>", dom, flags=re.DOTALL).group(1)
    assert title.startswith("Sample study")
    assert "&lt;script&gt;" in title
    assert not re.search(r"<(script|iframe)\b", dom)
    assert not re.search(r"<[a-z]+[^<>]*\son(error|load)=", re.sub(r"=\"[^\"]*\"", '=""', dom))


def test_browser_is_able_to_run_scripts(tmp_path):
    # the test above can fail: the same browser does run a script on a page that lets it
    path = tmp_path / "open.html"
    path.write_text("<title>a</title><script>document.title='owned'</script>")
    assert "<title>owned</title>" in run(tmp_path, "--dump-dom", path.as_uri())


def test_policy_blocks_even_a_script_that_got_in(attacked, tmp_path):
    # second wall: the content security policy of the page itself
    _, path = attacked
    broken = tmp_path / "broken.html"
    broken.write_text(path.read_text().replace("</main>", "<script>document.title='owned'</script></main>"))
    assert "<title>owned</title>" not in run(tmp_path, "--dump-dom", broken.as_uri())


def test_page_prints_to_pdf(tmp_path):
    # every section is on paper: text of the printed file through poppler's pdftotext where it is installed
    path = write_study_page(tmp_path / "report.html", make_summary())
    printed = tmp_path / "report.pdf"
    run(tmp_path, f"--print-to-pdf={printed}", "--no-pdf-header-footer", path.as_uri())
    assert printed.read_bytes().startswith(b"%PDF")
    reader = shutil.which("pdftotext")
    if reader is None:
        pytest.skip("printed, but pdftotext (poppler-utils) is not installed to read it")
    text = subprocess.run([reader, str(printed), "-"], capture_output=True, text=True, check=True).stdout
    for part in ("Summary", "Observed over predicted", "Decisions", "Failures", "Methods", "Cautions", "17025"):
        assert part in text
