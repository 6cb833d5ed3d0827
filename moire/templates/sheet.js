"use strict";
(() => {
  const PER_PAGE = 48;
  const names = ["file", "folder", "verdict", "severity", "visibility", "kinds", "ruling", "what", "error", "pictures"];
  const rows = JSON.parse(document.getElementById("rows").textContent)
    .map((values, at) => Object.assign({ at }, ...names.map((name, i) => ({ [name]: values[i] }))));
  const sieve = document.getElementById("sieve");
  const cards = document.getElementById("cards");
  const status = document.getElementById("status");
  const back = document.getElementById("back");
  const on = document.getElementById("on");
  const byName = (a, b) => (a.folder + "/" + a.file < b.folder + "/" + b.file ? -1 : 1);
  // Rows arrive worst first; what has no ruling comes last.
  const orders = {
    worst: (a, b) => a.at - b.at,
    visible: (a, b) => b.visibility - a.visibility || a.at - b.at,
    name: byName,
    ruling: (a, b) => (a.ruling ?? Infinity) - (b.ruling ?? Infinity) || byName(a, b),
  };
  let shown = rows;
  let page = 0;

  const element = (tag, text, properties = {}) => Object.assign(document.createElement(tag), { textContent: text }, properties);

  function picture(row, kind, side) {
    return element("img", "", {
      loading: "lazy", decoding: "async", width: side, height: side, className: kind === "jpg" ? "thumb" : "piece",
      alt: kind === "jpg" ? "Whole scan " + row.file : "Piece of " + row.file + " at 1:1",
      src: row.pictures + "." + kind,
    });
  }

  function card(row) {
    const item = element("li", "", { className: "card " + row.verdict });
    item.append(element("h3", row.file));
    if (row.folder) item.append(element("p", row.folder, { className: "note" }));
    const seen = row.visibility >= 0.1 ? ", " + row.visibility.toFixed(1) + " × the eye's threshold" : "";
    item.append(element("p", row.verdict + seen, { className: "said" }));
    item.append(element("p", row.error || row.what));
    if (row.pictures) {
      const more = element("p", "");
      more.append(element("a", "Report of " + row.file, { href: row.pictures + ".html" }));
      const looks = element("div", "", { className: "looks" });
      const piece = picture(row, "png", 192);
      piece.addEventListener("load", () => { piece.width = piece.naturalWidth; piece.height = piece.naturalHeight; });
      looks.append(picture(row, "jpg", 192), piece);
      item.append(more, looks);
    }
    return item;
  }

  function draw() {
    const last = Math.max(1, Math.ceil(shown.length / PER_PAGE));
    page = Math.min(Math.max(0, page), last - 1);
    cards.replaceChildren(...shown.slice(page * PER_PAGE, (page + 1) * PER_PAGE).map(card));
    status.textContent = shown.length + (shown.length === 1 ? " scan" : " scans") + ", page " + (page + 1) + " of " + last;
    back.disabled = page === 0;
    on.disabled = page === last - 1;
  }

  function sift() {
    const form = new FormData(sieve);
    const verdicts = new Set(form.getAll("verdict"));
    const kind = form.get("kind");
    const from = form.get("from") === "" ? -Infinity : Number(form.get("from"));
    const to = form.get("to") === "" ? Infinity : Number(form.get("to"));
    const ruled = from > -Infinity || to < Infinity;
    const words = form.get("words").trim().toLowerCase();
    shown = rows.filter((row) => verdicts.has(row.verdict)
      && (!kind || row.kinds.includes(kind))
      && (!ruled || (row.ruling !== null && row.ruling >= from && row.ruling <= to))
      && (!words || (row.folder + "/" + row.file).toLowerCase().includes(words)));
    shown.sort(orders[form.get("order")]);
    page = 0;
    draw();
  }

  function turn(by) {
    page += by;
    draw();
    document.getElementById("h-scans").scrollIntoView();
  }

  document.body.classList.add("scripted");
  sieve.addEventListener("input", sift);
  sieve.addEventListener("submit", (event) => event.preventDefault());
  back.addEventListener("click", () => turn(-1));
  on.addEventListener("click", () => turn(1));
  sift();
})();
