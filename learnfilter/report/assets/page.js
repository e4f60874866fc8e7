"use strict";
(() => {
  const svgNumber = (value) => value.toFixed(2);
  const known = (pose) => pose && pose.every((part) => part !== null);

  const compose = ([x, y, heading], [forward, left, turn]) => [
    x + Math.cos(heading) * forward - Math.sin(heading) * left,
    y + Math.sin(heading) * forward + Math.cos(heading) * left,
    heading + turn,
  ];

  const trail = (poses, last) => {
    let path = "";
    let down = false;
    for (const pose of poses.slice(0, last + 1)) {
      if (known(pose)) path += `${down ? "L" : "M"}${svgNumber(pose[0])} ${svgNumber(pose[1])}`;
      down = known(pose);
    }
    return path;
  };

  const rays = (data, step, pose) => {
    let lines = "";
    let hits = "";
    if (!known(pose)) return { lines, hits };
    const [x, y, heading] = compose(pose, data.mount);
    data.depth[step].forEach((range, column) => {
      if (range === null) return;
      const angle = heading + data.bearings[column];
      const end = `${svgNumber(x + range * Math.cos(angle))} ${svgNumber(y + range * Math.sin(angle))}`;
      lines += `M${svgNumber(x)} ${svgNumber(y)}L${end}`;
      hits += `M${end}h0`;
    });
    return { lines, hits };
  };

  const place = (mark, pose) => {
    mark.toggleAttribute("hidden", !known(pose));
    if (known(pose)) {
      mark.setAttribute("transform", `translate(${pose[0]} ${pose[1]}) rotate(${(pose[2] * 180) / Math.PI})`);
    }
  };

  const words = (track, step) => {
    const parts = [`entropy ${track.entropy[step].toFixed(2)} nats`];
    if (track.near && track.near[step] !== null) {
      parts.push(`${(100 * track.near[step]).toFixed(1)}% of the mass near the reference`);
    }
    if (track.error_m && track.error_m[step] !== null) {
      parts.push(`estimate off by ${track.error_m[step].toFixed(2)} m and ${track.error_deg[step].toFixed(0)}\u00b0`);
    }
    return parts.join(" \u00b7 ");
  };

  const showPanel = (panel, data, track, step, source) => {
    const find = (selector) => panel.querySelector(selector);
    const frames = find(".frames");
    const { across, columns, rows } = frames.dataset;
    const corner = `${(step % across) * columns} ${Math.floor(step / across) * rows}`;
    frames.setAttribute("viewBox", `${corner} ${columns} ${rows}`);
    const reference = data.reference ? data.reference[step] : null;
    const estimate = track.estimate[step];
    place(find("g.reference"), reference);
    place(find("g.estimate"), estimate);
    find(".reference-trail").setAttribute("d", data.reference ? trail(data.reference, step) : "");
    find(".estimate-trail").setAttribute("d", trail(track.estimate, step));
    const { lines, hits } = rays(data, step, { reference, estimate }[source]);
    find(".ray").setAttribute("d", lines);
    find(".hit").setAttribute("d", hits);
    const badge = find(".badge");
    const locked = track.locked && track.locked[step];
    badge.textContent = track.locked ? (locked ? "\u2713 locked" : "not locked") : "";
    badge.classList.toggle("locked", Boolean(locked));
    find(".readout").textContent = words(track, step);
    const label = `Belief of ${track.model} after strip ${data.strips[step]} of ${data.of}: ${words(track, step)}`;
    find("svg.plan").setAttribute("aria-label", label);
  };

  const makePlayer = (root, index) => {
    const data = JSON.parse(root.querySelector("script.drive").textContent);
    const slider = root.querySelector(".step");
    const output = root.querySelector(".where");
    const source = root.querySelector(".rays");
    const button = root.querySelector(".play");
    const last = data.strips.length - 1;
    let timer = null;

    const show = () => {
      const step = Number(slider.value) - 1;
      output.textContent = `strip ${data.strips[step]} of ${data.of}`;
      slider.setAttribute("aria-valuetext", output.textContent);
      root.querySelectorAll(".panel").forEach((panel, k) => {
        showPanel(panel, data, data.tracks[k], step, source.value);
      });
      root.querySelectorAll(".cursor").forEach((cursor) => {
        const { low, high, left, right } = cursor.parentNode.dataset;
        const part = (data.strips[step] - low) / (high - low);
        const x = Number(left) + part * (right - left);
        cursor.setAttribute("x1", x);
        cursor.setAttribute("x2", x);
      });
    };
    const go = (value) => {
      slider.value = value;
      slider.setAttribute("value", slider.value);
      show();
    };
    const remember = () => history.replaceState(null, "", `#drive=${index + 1}&step=${slider.value}`);
    const stop = () => {
      clearInterval(timer);
      timer = null;
      button.textContent = "Play";
      remember();
    };
    const play = () => {
      if (Number(slider.value) > last) go(1);
      button.textContent = "Pause";
      timer = setInterval(() => {
        go(Number(slider.value) + 1);
        if (Number(slider.value) > last) stop();
      }, Math.max(80, Math.min(450, 15000 / (last + 1))));
    };

    button.addEventListener("click", () => (timer ? stop() : play()));
    source.addEventListener("change", show);
    slider.addEventListener("input", () => {
      if (timer) stop();
      go(slider.value);
      remember();
    });
    show();
    return { root, go, stop: () => timer && stop(), nudge: (by) => { go(Number(slider.value) + by); remember(); } };
  };

  const players = [...document.querySelectorAll(".player")].map(makePlayer);
  if (!players.length) return;
  const chooser = document.getElementById("drive");
  let current = players[0];

  const choose = (number) => {
    current = players[number - 1] || players[0];
    players.forEach((player) => {
      player.stop();
      player.root.hidden = player !== current;
    });
    if (chooser) chooser.value = players.indexOf(current) + 1;
  };
  const followAddress = () => {
    const wanted = new URLSearchParams(location.hash.slice(1));
    if (wanted.has("drive") || wanted.has("step")) choose(Number(wanted.get("drive") || 1));
    if (wanted.has("step")) current.go(Number(wanted.get("step")) || 1);
  };

  choose(1);
  if (chooser) chooser.addEventListener("change", () => choose(Number(chooser.value)));
  addEventListener("hashchange", followAddress);
  addEventListener("keydown", (event) => {
    const by = { ArrowLeft: -1, ArrowRight: 1 }[event.key];
    if (!by || event.altKey || event.ctrlKey || event.metaKey || event.target.closest("input, select, .scroll")) return;
    current.nudge(by);
    event.preventDefault();
  });
  followAddress();
})();
