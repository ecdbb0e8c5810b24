(function () {
  "use strict";
  var $ = function (q, at) { return (at || document).querySelector(q); };
  var all = function (q, at) { return Array.prototype.slice.call((at || document).querySelectorAll(q)); };

  // Light or dark.
  var theme = $("#theme");
  if (theme) theme.addEventListener("click", function () {
    var root = document.documentElement;
    var dark = root.dataset.theme ? root.dataset.theme === "dark" : matchMedia("(prefers-color-scheme: dark)").matches;
    root.dataset.theme = dark ? "light" : "dark";
  });

  // Tables are open on paper.
  window.addEventListener("beforeprint", function () {
    all("details.figures").forEach(function (d) { d.dataset.was = d.open ? "1" : ""; d.open = true; });
  });
  window.addEventListener("afterprint", function () {
    all("details.figures").forEach(function (d) { d.open = d.dataset.was === "1"; });
  });

  // Which figure the chart of bands shows.
  all("#which input").forEach(function (input) {
    input.addEventListener("change", function () {
      all(".bandchart").forEach(function (f) { f.hidden = f.dataset.key !== input.value; });
    });
  });

  // Copying the table of bands, tab separated.
  all("button.copy").forEach(function (button) {
    button.addEventListener("click", function () {
      var rows = all("tr", document.getElementById(button.dataset.table)).map(function (tr) {
        return all("th,td", tr).map(function (c) { return c.textContent.trim(); }).join("\t");
      });
      var text = rows.join("\n") + "\n", said = button.textContent;
      var done = function (word) { button.textContent = word; setTimeout(function () { button.textContent = said; }, 1500); };
      var mark = function () {
        var range = document.createRange(), s = getSelection();
        range.selectNodeContents(document.getElementById(button.dataset.table));
        s.removeAllRanges(); s.addRange(range);
        done(document.execCommand("copy") ? "Copied" : "Marked: copy it by hand");
      };
      if (navigator.clipboard) navigator.clipboard.writeText(text).then(function () { done("Copied"); }, mark); else mark();
    });
  });

  // Levels read back from the pixels of the response picture.
  var response = $("#response svg"), legend = $("#legend img");
  if (response && legend) {
    var image = new Image(), strip = new Image(), index = null, pixels = null, width = 0, height = 0;
    var read = function (img) {
      var c = document.createElement("canvas");
      c.width = img.naturalWidth; c.height = img.naturalHeight;
      var x = c.getContext("2d", { willReadFrequently: true });
      x.drawImage(img, 0, 0);
      return x.getImageData(0, 0, c.width, c.height).data;
    };
    var ready = function () {
      if (index || !image.complete || !strip.complete || !image.naturalWidth || !strip.naturalWidth) return;
      var s = read(strip);
      index = {};
      for (var i = 0; i < 256; i++) index[s[4 * i] << 16 | s[4 * i + 1] << 8 | s[4 * i + 2]] = i;
      pixels = read(image); width = image.naturalWidth; height = image.naturalHeight;
    };
    image.onload = strip.onload = ready;
    image.src = $("image", response).getAttribute("href"); strip.src = legend.src;
    var out = $("#response .readout"), first = out.textContent;
    var d = response.dataset;
    response.addEventListener("pointermove", function (e) {
      if (!index) return;
      var box = response.getBoundingClientRect();
      var fx = Math.min(1, Math.max(0, (e.clientX - box.left) / box.width)), fy = Math.min(1, Math.max(0, (e.clientY - box.top) / box.height));
      var px = Math.min(width - 1, Math.floor(fx * width)), py = Math.min(height - 1, Math.floor(fy * height)), at = 4 * (py * width + px);
      var level = +d.lowDb + (d.highDb - d.lowDb) * index[pixels[at] << 16 | pixels[at + 1] << 8 | pixels[at + 2]] / 255;
      var angle = +d.xFrom + (d.xTo - d.xFrom) * (width > 1 ? px / (width - 1) : 0);
      var hz = d.yTo * Math.pow(d.yFrom / d.yTo, height > 1 ? py / (height - 1) : 0);
      out.textContent = angle.toFixed(1) + "°, " + (hz >= 1000 ? (hz / 1000).toFixed(2) + " kHz" : hz.toFixed(0) + " Hz") + ": " + level.toFixed(1) + " dB";
      out.dataset.level = level.toFixed(3);
    });
    response.addEventListener("pointerleave", function () { out.textContent = first; });
  }

  // Listening: both tracks are two channels of one buffer, played by one
  // source, so that they cannot drift apart; a switch is a ramp of two gains.
  var player = $("#player");
  if (!player) return;
  var context, buffer, source, gains, analysers, started = 0, offset = 0, playing = false, side = "output", blind = null, right = 0, tries = 0;
  var length = +player.dataset.length, ramp = 0.012, rise = 0.05;
  var play = $("#play"), seek = $("#seek"), match = $("#match"), from = $("#loopfrom"), to = $("#loopto"), loop = $("#loop"), say = $("#say"), time = $("#time");
  var bytes = function (name) {
    var text = atob($("[data-clip=" + name + "]").textContent.trim()), b = new Uint8Array(text.length);
    for (var i = 0; i < b.length; i++) b[i] = text.charCodeAt(i);
    return b.buffer;
  };
  var decode = function () {
    if (buffer) return Promise.resolve();
    context = new (window.AudioContext || window.webkitAudioContext)({ sampleRate: +player.dataset.rate });
    return Promise.all([context.decodeAudioData(bytes("reference")), context.decodeAudioData(bytes("output"))]).then(function (pair) {
      var frames = Math.min(pair[0].length, pair[1].length);
      buffer = context.createBuffer(2, frames, pair[0].sampleRate);
      pair.forEach(function (b, c) { buffer.copyToChannel(b.getChannelData(0).subarray(0, frames), c); });
      length = frames / buffer.sampleRate;
      seek.max = length;
      gains = [context.createGain(), context.createGain()];
      analysers = [context.createAnalyser(), context.createAnalyser()];
      gains.forEach(function (g, i) { g.gain.value = 0; g.connect(analysers[i]); analysers[i].connect(context.destination); });
      // The destination is stereo: a lone channel is spread to both sides.
    });
  };
  var loops = function () {
    var a = Math.max(0, Math.min(+from.value || 0, length)), b = Math.max(0, Math.min(+to.value || length, length));
    return loop.checked && b - a >= 0.1 ? [a, b] : null;
  };
  var position = function (now) {
    if (!playing) return offset;
    var t = (now === undefined ? context.currentTime : now) - started + offset, l = source.loop ? [source.loopStart, source.loopEnd] : null;
    if (l && t > l[1]) t = l[0] + (t - l[0]) % (l[1] - l[0]);
    return Math.min(t, length);
  };
  var levels = function () {
    // Only the louder one is turned down.
    var d = player.dataset, difference = 0;
    if (match.value === "level") difference = d.outputLevel - d.referenceLevel;
    if (match.value === "target") difference = +d.targetChange;
    return [difference < 0 ? Math.pow(10, difference / 20) : 1, difference > 0 ? Math.pow(10, -difference / 20) : 1];
  };
  var mix = function (now) {
    if (!gains) return;
    var want = levels(), heard = { reference: 0, output: 1 }[blind ? blind[side] : side];
    gains.forEach(function (g, i) {
      var v = i === heard ? want[i] : 0, t = context.currentTime;
      g.gain.cancelScheduledValues(t);
      // A start anywhere rises from silence.
      if (now) { g.gain.setValueAtTime(0, t); g.gain.linearRampToValueAtTime(v, t + rise); return; }
      g.gain.setValueAtTime(g.gain.value, t);
      g.gain.linearRampToValueAtTime(v, t + ramp);
    });
  };
  var stop = function () {
    if (!playing) return;
    offset = position(); playing = false;
    source.onended = null; source.stop();
    show();
  };
  var start = function () {
    return decode().then(function () { return context.resume(); }).then(function () {
      if (playing) return;
      if (offset >= length - 0.01) offset = 0;
      source = context.createBufferSource();
      source.buffer = buffer;
      var l = loops();
      if (l) { source.loop = true; source.loopStart = l[0]; source.loopEnd = l[1]; if (offset < l[0] || offset >= l[1]) offset = l[0]; }
      var split = context.createChannelSplitter(2);
      source.connect(split);
      gains.forEach(function (g, i) { split.connect(g, i); });
      mix(true);
      // On a whole frame, so that nothing is interpolated.
      offset = Math.ceil(offset * buffer.sampleRate) / buffer.sampleRate;
      started = context.currentTime;
      source.start(0, offset);
      source.onended = function () { playing = false; offset = 0; show(); };
      playing = true;
      show(); tick();
    }).catch(function (e) {
      say.textContent = "This browser cannot play the excerpts (" + e.message + "). The tracks lie beside this page.";
    });
  };
  var jump = function (t) {
    var was = playing;
    stop(); offset = Math.max(0, Math.min(t, length));
    show();
    return was ? start() : Promise.resolve();
  };
  var choose = function (name) { side = name; mix(false); show(); };
  var show = function () {
    play.textContent = playing ? "Pause" : "Play";
    play.setAttribute("aria-pressed", playing);
    all("#sides button").forEach(function (b) { b.setAttribute("aria-pressed", b.dataset.side === side); });
    var p = position();
    if (document.activeElement !== seek || playing) seek.value = p;
    time.textContent = p.toFixed(1) + " / " + length.toFixed(1) + " s";
    player.dataset.playing = playing ? "1" : "";
    player.dataset.side = side;
    player.dataset.position = p.toFixed(4);
  };
  var tick = function () { show(); if (playing) requestAnimationFrame(tick); };
  play.addEventListener("click", function () { if (playing) stop(); else start(); });
  seek.addEventListener("input", function () { jump(+seek.value); });
  match.addEventListener("change", function () { mix(false); });
  [from, to, loop].forEach(function (i) { i.addEventListener("change", function () { if (playing) jump(position()); }); });
  all("#sides button").forEach(function (b) { b.addEventListener("click", function () { choose(b.dataset.side); }); });
  var names = all("#sides button").map(function (b) { return b.textContent; });
  $("#blind").addEventListener("click", function () {
    var buttons = all("#sides button");
    if (blind) {
      blind = null;
      buttons.forEach(function (b, i) { b.textContent = names[i]; });
    } else {
      blind = Math.random() < 0.5 ? { reference: "reference", output: "output" } : { reference: "output", output: "reference" };
      buttons.forEach(function (b, i) { b.textContent = "XY"[i]; });
      say.textContent = "One of X and Y is the steered track.";
    }
    $("#guess").hidden = !blind;
    this.setAttribute("aria-pressed", !!blind);
    mix(false); show();
  });
  all("#guess button").forEach(function (b) {
    b.addEventListener("click", function () {
      if (!blind) return;
      var ok = blind[b.dataset.guess] === "output";
      tries++; if (ok) right++;
      say.textContent = (ok ? "Right" : "Wrong") + ": " + right + " of " + tries + ". Drawn anew.";
      blind = Math.random() < 0.5 ? { reference: "reference", output: "output" } : { reference: "output", output: "reference" };
      mix(false);
    });
  });
  document.addEventListener("keydown", function (e) {
    if (e.ctrlKey || e.metaKey || e.altKey || /^(INPUT|SELECT|TEXTAREA)$/.test(e.target.tagName)) return;
    var key = e.key.toLowerCase();
    if (key === " " && e.target.tagName !== "BUTTON" && e.target.tagName !== "SUMMARY") { e.preventDefault(); if (playing) stop(); else start(); }
    else if (key === "x") choose(side === "output" ? "reference" : "output");
    else if (key === "j") jump(position() - 3);
    else if (key === "l") jump(position() + 3);
    else if (key === "r") { loop.checked = !loop.checked; if (playing) jump(position()); }
  });
  all("[data-jump]").forEach(function (a) { a.addEventListener("click", function () { jump(+a.dataset.jump - player.dataset.start); }); });
  // For whoever checks: the playhead with the clock of the sound, the last
  // sample that each gain let through, and the level of what it lets through.
  player.alidadeClock = function () { var t = context ? context.currentTime : 0; return [position(t), t]; };
  player.alidadeHeard = function () {
    var last = analysers.map(function (a) { var d = new Float32Array(a.fftSize); a.getFloatTimeDomainData(d); return d[d.length - 1]; });
    return [position(), last[0], last[1]];
  };
  player.alidadeLevels = function () {
    return analysers ? analysers.map(function (a) {
      var d = new Float32Array(a.fftSize), sum = 0;
      a.getFloatTimeDomainData(d);
      for (var i = 0; i < d.length; i++) sum += d[i] * d[i];
      return Math.sqrt(sum / d.length);
    }) : [0, 0];
  };
  show();
})();
