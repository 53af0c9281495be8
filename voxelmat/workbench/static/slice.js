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
