// A slice on a canvas, with a slider, an axis and a field to choose.
function render({model, el}) {
  const canvas = element('canvas', {role: 'img', tabIndex: 0});
  const slider = element('input', {type: 'range', min: 0, step: 1});
  slider.setAttribute('aria-label', 'Slice');
  const axis = element('select', {}), field = element('select', {});
  const where = element('output', {}), key = element('div', {className: 'row legend'});
  const frame = element('div', {className: 'frame'});
  const line = element('div', {className: 'status', role: 'status'});
  const row = element('div', {className: 'row'},
    element('label', {}, 'Slice ', slider), where,
    element('label', {}, 'across ', axis), element('label', {}, 'showing ', field));
  el.append(element('div', {className: 'vm'}, row, canvas, frame, key, line));
  const paint = canvas.getContext('2d');
  let waiting = false, wanted = null;

  function choices(select, names, chosen) {
    select.replaceChildren(...names.map(([value, text]) => element('option', {value, textContent: text})));
    select.value = chosen;
    select.parentElement.hidden = names.length < 2;
  }
  function controls() {
    choices(axis, model.get('axes').map(a => [a, a]), model.get('axis'));
    choices(field, model.get('fields').map(f => [f, f]), model.get('field'));
    slider.max = model.get('count') - 1;
    if (wanted === null) slider.value = model.get('index');
  }
  async function show() {
    controls();
    where.textContent = model.get('where');
    frame.textContent = model.get('frame');
    canvas.setAttribute('aria-label', model.get('label') + ', ' + model.get('where'));
    legend(model, key);
    const data = model.get('picture'), seq = model.get('seq');
    if (!data.byteLength) return;
    const image = await createImageBitmap(new Blob([data], {type: 'image/png'}));
    if (seq !== model.get('seq')) return;           // a newer one is on its way
    const [wide, high] = model.get('size_mm');
    const scale = Math.min(820 / wide, 420 / high);
    canvas.width = Math.max(1, Math.round(wide * scale));
    canvas.height = Math.max(1, Math.round(high * scale));
    paint.imageSmoothingEnabled = image.width > canvas.width;
    paint.drawImage(image, 0, 0, canvas.width, canvas.height);
    image.close();
    canvas.dataset.seq = seq;
    waiting = false;
    if (wanted !== null && wanted !== model.get('index')) { const w = wanted; wanted = null; send(w); }
    else wanted = null;
  }
  function send(index) {                             // one slice on its way, the last wish wins
    if (waiting) { wanted = index; return; }
    if (index === model.get('index')) return;
    waiting = true;
    model.set('index', index);
    model.save_changes();
    setTimeout(() => { waiting = false; }, 4000);
  }
  slider.addEventListener('input', () => send(Number(slider.value)));
  slider.addEventListener('keydown', e => e.stopPropagation());
  axis.addEventListener('change', () => { model.set('axis', axis.value); model.save_changes(); });
  field.addEventListener('change', () => { model.set('field', field.value); model.save_changes(); });
  // Painting: drawn here at once, sent as one message when the stroke ends.
  const held = () => { const b = model.get('brush') || {}; return b.on ? b : null; };
  let stroke = null, cursor = [0.5, 0.5];
  const place = e => {
    const box = canvas.getBoundingClientRect();
    return [(e.clientX - box.left) / box.width, (e.clientY - box.top) / box.height]
      .map(v => Math.min(1, Math.max(0, v)));
  };
  function dab([u, v], b) {
    const r = Math.max(1, b.radius_mm * canvas.width / model.get('size_mm')[0]);
    paint.fillStyle = b.colour;
    if (b.square) paint.fillRect(u * canvas.width - r, v * canvas.height - r, 2 * r, 2 * r);
    else { paint.beginPath(); paint.arc(u * canvas.width, v * canvas.height, r, 0, 7); paint.fill(); }
  }
  function along(from, to, b) {
    const steps = Math.ceil(Math.hypot((to[0] - from[0]) * canvas.width, (to[1] - from[1]) * canvas.height) / 2);
    for (let i = 1; i <= steps; i++) dab([from[0] + (to[0] - from[0]) * i / steps, from[1] + (to[1] - from[1]) * i / steps], b);
  }
  function give(points) {
    model.send({kind: 'stroke', axis: model.get('axis'), index: model.get('index'), points});
  }
  canvas.addEventListener('pointerdown', e => {
    const b = held();
    if (!b || e.button) return;
    const started = performance.now();
    canvas.setPointerCapture(e.pointerId); canvas.focus();
    stroke = [place(e)]; cursor = stroke[0];
    dab(stroke[0], b);
    canvas.dataset.drawn = (performance.now() - started).toFixed(1);
    e.preventDefault();
  });
  canvas.addEventListener('pointermove', e => {
    const b = held();
    if (!b || !stroke || !b.drags) return;
    const to = place(e);
    along(stroke[stroke.length - 1], to, b);
    stroke.push(to);
  });
  const lift = () => { if (stroke) { give(stroke); stroke = null; } };
  canvas.addEventListener('pointerup', lift);
  canvas.addEventListener('pointercancel', () => { stroke = null; show(); });
  function cross(b) {                                // where the brush stands, for the keyboard
    const r = Math.max(3, b.radius_mm * canvas.width / model.get('size_mm')[0]);
    const [x, y] = [cursor[0] * canvas.width, cursor[1] * canvas.height];
    paint.save(); paint.strokeStyle = '#000'; paint.lineWidth = 3; ring();
    paint.strokeStyle = '#fff'; paint.lineWidth = 1; ring(); paint.restore();
    function ring() {
      paint.beginPath();
      if (b.square) paint.rect(x - r, y - r, 2 * r, 2 * r); else paint.arc(x, y, r, 0, 7);
      paint.moveTo(x - 4, y); paint.lineTo(x + 4, y); paint.moveTo(x, y - 4); paint.lineTo(x, y + 4);
      paint.stroke();
    }
  }
  canvas.addEventListener('keydown', e => {
    const b = held();
    if (!b) return;
    const move = {ArrowUp: [0, -1], ArrowDown: [0, 1], ArrowLeft: [-1, 0], ArrowRight: [1, 0]}[e.key];
    const slices = {PageUp: 1, PageDown: -1}[e.key];
    if (!move && !slices && e.key !== ' ' && e.key !== 'Enter') return;
    e.preventDefault(); e.stopImmediatePropagation();
    if (slices) send(Math.min(model.get('count') - 1, Math.max(0, model.get('index') + slices)));
    else if (!move) { dab(cursor, b); give([[...cursor]]); }
    else {
      const [wide, high] = model.get('size_mm');
      const far = (e.shiftKey ? 4 : 1) * b.radius_mm / 2;
      cursor = [cursor[0] + move[0] * far / wide, cursor[1] + move[1] * far / high]
        .map(v => Math.min(1, Math.max(0, v)));
      const [x, y] = cursor.map((v, i) => Math.round(100 * (i ? 1 - v : v)));
      show().then(() => { cross(b); where.textContent = `${model.get('where')}; brush ${x} % across, ${y} % up`; });
    }
  });
  function hand() {
    const b = held();
    canvas.style.cursor = b ? 'crosshair' : '';
    canvas.style.touchAction = b ? 'none' : '';
    canvas.setAttribute('aria-description', b ? 'Arrow keys move the brush, Space paints, Page Up and Page Down change the slice.' : '');
  }
  model.on('change:brush', hand); hand();
  canvas.addEventListener('keydown', e => {
    const step = {ArrowUp: 1, ArrowRight: 1, PageUp: 10, ArrowDown: -1, ArrowLeft: -1, PageDown: -10}[e.key];
    if (step === undefined) return;
    send(Math.min(model.get('count') - 1, Math.max(0, model.get('index') + step)));
    e.preventDefault(); e.stopPropagation();
  });
  model.on('change:seq', show);
  model.on('change:status', () => status(model, line));
  show(); status(model, line);
}
export default { render };
