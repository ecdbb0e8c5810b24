(function () {
  "use strict";
  var $ = function (q) { return document.querySelector(q); };
  var all = function (q) { return Array.prototype.slice.call(document.querySelectorAll(q)); };
  var theme = $("#theme");
  theme.addEventListener("click", function () {
    var root = document.documentElement;
    var dark = root.dataset.theme ? root.dataset.theme === "dark" : matchMedia("(prefers-color-scheme: dark)").matches;
    root.dataset.theme = dark ? "light" : "dark";
  });

  var body = $("#takes tbody");
  var rows = all("#takes tbody tr").map(function (tr, i) {
    var d = tr.dataset;
    return { tr: tr, order: i, rank: +d.rank, name: d.name, state: d.state === "failed" ? "fault" : d.state,
      gain: d.gain === "" ? null : +d.gain, direction: d.direction === "" ? null : +d.direction,
      channels: d.channels === "" ? null : +d.channels, text: tr.textContent.toLowerCase() };
  });
  // Names are compared once; a sort then goes by their places.
  var collator = new Intl.Collator(undefined, { numeric: true });
  rows.slice().sort(function (a, b) { return collator.compare(a.name, b.name) || a.order - b.order; })
    .forEach(function (r, i) { r.name = i; });
  var sort = function (key, up) {
    var sign = up ? 1 : -1;
    rows.sort(function (a, b) {
      var x = a[key], y = b[key];
      // What has no figure stays at the end either way.
      if (x === null || y === null) return (x === null) - (y === null) || a.order - b.order;
      return sign * (x - y) || a.order - b.order;
    });
    var part = document.createDocumentFragment();
    rows.forEach(function (r) { part.appendChild(r.tr); });
    body.replaceChildren(part);
    all("#takes th").forEach(function (th) { th.removeAttribute("aria-sort"); });
    $("#takes button[data-sort=" + key + "]").parentNode.setAttribute("aria-sort", up ? "ascending" : "descending");
  };
  all("#takes button[data-sort]").forEach(function (b) {
    b.addEventListener("click", function () {
      var key = b.dataset.sort, was = b.parentNode.getAttribute("aria-sort");
      sort(key, was ? was === "descending" : key === "name" || key === "rank");
      keep();
    });
  });
  var filter = function () {
    var find = $("#find").value.trim().toLowerCase(), state = $("#states input:checked").value;
    var least = $("#least").value === "" ? null : +$("#least").value, n = 0;
    rows.forEach(function (r) {
      var show = (!find || r.text.indexOf(find) >= 0) && (!state || r.state === state) && (least === null || r.gain !== null && r.gain >= least);
      if (show) n++;
      if (r.tr.hidden === show) r.tr.hidden = !show;
    });
    $("#count").textContent = "Showing " + n + " of " + rows.length;
  };
  // What is shown is kept in the address, so that a link shows the same.
  var keep = function () {
    var p = new URLSearchParams(), sorted = $("#takes th[aria-sort]");
    if ($("#find").value) p.set("find", $("#find").value);
    if ($("#states input:checked").value) p.set("state", $("#states input:checked").value);
    if ($("#least").value) p.set("least", $("#least").value);
    var key = sorted.querySelector("button").dataset.sort, up = sorted.getAttribute("aria-sort") === "ascending";
    if (key !== "rank" || !up) p.set("sort", (up ? "" : "-") + key);
    location.replace("#" + p.toString());
  };
  var later;
  var changed = function () { filter(); clearTimeout(later); later = setTimeout(keep, 300); };
  $("#find").addEventListener("input", changed);
  $("#least").addEventListener("input", changed);
  all("#states input").forEach(function (i) { i.addEventListener("change", changed); });
  var p = new URLSearchParams(location.hash.slice(1));
  $("#find").value = p.get("find") || "";
  $("#least").value = p.get("least") || "";
  all("#states input").forEach(function (i) { if (i.value === (p.get("state") || "")) i.checked = true; });
  var key = (p.get("sort") || "").replace("-", "");
  if (["name", "rank", "gain", "direction", "channels"].indexOf(key) >= 0) sort(key, p.get("sort").charAt(0) !== "-");
  filter();
})();
