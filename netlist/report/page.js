(function () {
  var data = JSON.parse(document.getElementById("readout").textContent);
  var svg = document.querySelector("#drawing-bode svg"), out = document.getElementById("reading");
  var frames = svg ? svg.querySelectorAll('g[id*="axes_"] > g[id*="patch_"]:first-child path') : [];
  if (!frames.length || !data.hz.length) { out.hidden = true; return; }
  var low = Math.log(data.hz[0]), high = Math.log(data.hz[data.hz.length - 1]);
  function text(x, unit) { return x === null ? "none" : Number(x.toPrecision(4)) + " " + unit; }
  svg.addEventListener("mousemove", function (event) {
    frames.forEach(function (frame) {
      var box = frame.getBoundingClientRect(), x = (event.clientX - box.left) / box.width, k = 0;
      var y = (event.clientY - box.top) / box.height;
      if (x < 0 || x > 1 || y < 0 || y > 1) { return; }
      var f = Math.exp(low + (high - low) * x);
      while (k + 1 < data.hz.length && data.hz[k + 1] * data.hz[k] <= f * f) { k += 1; }
      out.textContent = text(data.hz[k], "Hz") + "   target " + text(data.target_db[k], "dB") +
        ", " + text(data.target_deg[k], "deg") + (data.error_db ? "   error " +
        text(data.error_db[k], "dB") + ", " + text(data.error_deg[k], "deg") : "   not simulated");
    });
  });
})();
