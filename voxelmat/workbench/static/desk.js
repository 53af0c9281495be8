// Draws the plain description of the desk: tabs, controls, messages; sends back what is done.
function render({model, el}) {
  const root = element('div', {className: 'vm vm-desk'});
  el.append(root);
  const title = element('strong', {className: 'title'});
  const undo = element('button', {type: 'button', textContent: 'Undo'});
  const redo = element('button', {type: 'button', textContent: 'Redo'});
  const copy = element('button', {type: 'button', textContent: 'Copy script'});
  const tabs = element('div', {className: 'tabs'});
  tabs.setAttribute('role', 'tablist');
  tabs.setAttribute('aria-label', 'Sections of the workbench');
  const body = element('div', {className: 'body'});
  body.setAttribute('role', 'tabpanel');
  body.tabIndex = 0;
  const job = element('div', {className: 'row job', hidden: true});
  const message = element('div', {className: 'message'});
  message.setAttribute('role', 'status');
  message.setAttribute('aria-live', 'polite');
  const line = element('code', {className: 'line'});
  root.append(element('div', {className: 'row bar'}, title, undo, redo, copy), tabs, message, job,
    body, line);

  const send = message => model.send(message);
  const act = (name, value) => send({kind: 'act', section: model.get('tab'), name, value});
  undo.addEventListener('click', () => send({kind: 'undo'}));
  redo.addEventListener('click', () => send({kind: 'redo'}));
  copy.addEventListener('click', async () => {
    const text = model.get('screen').script;
    try { await navigator.clipboard.writeText(text); copy.textContent = 'Copied'; }
    catch { window.prompt('Copy these lines:', text); }
    setTimeout(() => { copy.textContent = 'Copy script'; }, 1500);
  });
  root.addEventListener('keydown', e => e.stopPropagation());   // the notebook has keys of its own
  // Undo by keys counts in the pictures too, so it is caught before the notebook's own.
  const undoKeys = e => {
    if (!(e.ctrlKey || e.metaKey) || e.key.toLowerCase() !== 'z') return;
    const typing = ['INPUT', 'TEXTAREA'].includes(e.target.tagName) && e.target.type === 'text';
    if (typing || !(root.closest('.vm-bench') || root).contains(e.target)) return;
    send({kind: e.shiftKey ? 'redo' : 'undo'});
    e.preventDefault(); e.stopPropagation();
  };
  document.addEventListener('keydown', undoKeys, true);

  let count = 0;
  const labelled = (spec, input, ...after) => {
    const label = element('label', {textContent: spec.label});
    input.id = `vm-${Math.random().toString(36).slice(2)}-${count++}`;
    label.htmlFor = input.id;
    if (spec.hint) input.title = spec.hint;
    if (spec.disabled) input.disabled = true;
    return element('div', {className: 'field'}, label, input, ...after);
  };
  const unit = text => element('span', {className: 'unit', textContent: text || ''});
  const entry = (value, attributes) => element('input', {
    type: 'text', inputMode: 'decimal', className: 'number', value: value ?? '', ...attributes});
  const parse = text => text.trim() === '' ? null : (isNaN(Number(text)) ? text : Number(text));
  const commit = (input, done) => {
    let before = input.value;
    const go = () => { if (input.value !== before) { before = input.value; done(input.value); } };
    input.addEventListener('change', go);
    input.addEventListener('keydown', e => { if (e.key === 'Enter') go(); });
  };

  const makers = {
    heading: s => element('h4', {textContent: s.text}),
    words: s => element('p', {className: `words ${s.tone}`, textContent: s.text}),
    html: s => { const d = element('div', {className: 'made'}); d.innerHTML = s.html; return d; },
    number: s => {
      const input = entry(s.value);
      commit(input, v => act(s.id, parse(v)));
      input.addEventListener('keydown', e => {
        const sign = {ArrowUp: 1, ArrowDown: -1}[e.key];
        if (!sign || !s.step) return;
        input.value = Number((Number(input.value) + sign * s.step).toPrecision(9));
        input.dispatchEvent(new Event('change')); e.preventDefault();
      });
      return labelled(s, input, unit(s.unit));
    },
    vector: s => {
      const box = element('div', {className: 'vector'});
      box.setAttribute('role', 'group'); box.setAttribute('aria-label', s.label);
      const inputs = s.value.map((v, i) => {
        const input = entry(v);
        input.setAttribute('aria-label', `${s.label} ${'xyz'[i]}`);
        commit(input, () => act(s.id, inputs.map(one => parse(one.value))));
        return input;
      });
      box.append(...inputs);
      return element('div', {className: 'field'},
        element('span', {className: 'label', textContent: s.label}), box, unit(s.unit));
    },
    text: s => {
      const input = element('input', {type: 'text', value: s.value});
      commit(input, v => act(s.id, v));
      return labelled(s, input);
    },
    choice: s => {
      const input = element('select', {}, ...s.options.map(o => element('option', {value: o, textContent: o})));
      input.value = s.value;
      input.addEventListener('change', () => act(s.id, input.value));
      return labelled(s, input);
    },
    toggle: s => {
      const input = element('input', {type: 'checkbox', checked: s.value});
      input.addEventListener('change', () => act(s.id, input.checked));
      return labelled(s, input);
    },
    slider: s => {
      const input = element('input', {type: 'range', min: s.low, max: s.high, step: s.step});
      input.value = s.value;
      if (s.colour) input.style.accentColor = s.colour;
      const number = entry(s.value);
      number.setAttribute('aria-label', `${s.label}, typed`);
      let waiting = false;
      input.addEventListener('input', () => {                  // the last value of a drag wins
        number.value = input.value;
        if (waiting) return;
        waiting = true;
        setTimeout(() => { waiting = false; act(s.id, Number(input.value)); }, 40);
      });
      commit(number, v => act(s.id, parse(v)));
      return labelled(s, input, number, unit(s.unit));
    },
    button: s => {
      const b = element('button', {type: 'button', textContent: s.label, className: s.main ? 'main' : '',
        disabled: s.disabled, title: s.disabled ? s.why : ''});
      b.addEventListener('click', () => act(s.id, null));
      return b;
    },
    group: s => element('div', {className: 'row group'}, ...s.controls.map(make)),
    table: s => {
      const table = element('table', {className: s.stale ? 'data stale' : 'data'},
        element('caption', {textContent: s.caption}));
      const figure = text => /^[-+\u2212]?[\d.]/.test(text) && !/[a-z]{4}/i.test(text);
      const head = element('tr', {}, ...s.head.map((h, i) => {       // as its column is set
        const right = s.rows.length && s.rows.every(row => !row[i] || figure(row[i])) && s.rows.some(row => row[i]);
        const cell = element('th', {textContent: h, className: right ? 'figure' : ''});
        cell.scope = 'col';
        return cell;
      }));
      if (s.actions.length) head.append(element('td', {}));
      const rows = s.rows.map((row, r) => {
        const tr = element('tr', {className: r === s.chosen ? 'chosen' : ''}, ...row.map((text, i) => {
          const cell = element('td', {textContent: text});
          if (figure(text)) cell.className = text.length < 12 ? 'figure' : 'figure long';
          if (i === 0 && s.colours && s.colours[r]) {
            const swatch = element('span', {className: 'swatch'});
            swatch.style.background = s.colours[r]; cell.prepend(swatch, ' ');
          }
          return cell;
        }));
        if (s.id && !s.actions.length) {
          tr.tabIndex = 0;
          tr.addEventListener('click', () => act(s.id, ['choose', r]));
          tr.addEventListener('keydown', e => { if (e.key === 'Enter' || e.key === ' ') { act(s.id, ['choose', r]); e.preventDefault(); } });
        }
        if (s.actions.length) tr.append(element('td', {className: 'actions'}, ...s.actions.map(a => {
          const b = element('button', {type: 'button', textContent: a});
          b.setAttribute('aria-label', `${a} ${row[0]}`);
          b.addEventListener('click', () => act(s.id, [a, r]));
          return b;
        })));
        return tr;
      });
      if (!rows.length) rows.push(element('tr', {}, element('td', {colSpan: s.head.length, textContent: 'nothing yet'})));
      table.append(element('thead', {}, head), element('tbody', {}, ...rows));
      const scroll = element('div', {className: 'scroll'}, table);
      new ResizeObserver(() => {                            // what scrolls can be reached by keys
        const wide = scroll.scrollWidth > scroll.clientWidth + 1;
        if (wide) { scroll.tabIndex = 0; scroll.setAttribute('role', 'region'); scroll.setAttribute('aria-label', s.caption); }
        else ['tabindex', 'role', 'aria-label'].forEach(a => scroll.removeAttribute(a));
      }).observe(scroll);
      return scroll;
    },
    picture: s => {
      const image = element('img', {src: s.url, alt: s.alt, draggable: false, className: 'still'});
      if (s.width) image.style.width = `${s.width}px`;
      if (s.id) image.addEventListener('click', e => {
        const box = image.getBoundingClientRect();
        act(s.id, [(e.clientX - box.left) / box.width, (e.clientY - box.top) / box.height]);
      });
      return image;
    },
    progress: s => {
      const bar = element('progress', s.total ? {max: s.total, value: s.done} : {});
      bar.setAttribute('aria-label', s.label);
      return element('div', {className: 'field'}, element('span', {className: 'label', textContent: s.label}), bar, unit(s.text));
    },
    file: s => {
      const input = element('input', {type: 'file', accept: s.accept});
      const give = async file => {
        if (!file) return;
        const data = await file.arrayBuffer();
        model.send({kind: 'act', section: model.get('tab'), name: s.id, file: file.name}, undefined, [data]);
      };
      input.addEventListener('change', () => give(input.files[0]));
      const box = labelled(s, input);
      box.classList.add('drop');
      box.addEventListener('dragover', e => { e.preventDefault(); e.stopPropagation(); box.classList.add('over'); });
      box.addEventListener('dragleave', () => box.classList.remove('over'));
      box.addEventListener('drop', e => {
        e.preventDefault(); e.stopPropagation(); box.classList.remove('over'); give(e.dataTransfer.files[0]);
      });
      return box;
    },
  };
  const make = spec => (makers[spec.kind] || (() => element('p', {textContent: `? ${spec.kind}`})))(spec);

  // A control that did not change keeps its element, and with it focus and half-typed text.
  let drawn = [];
  function draw(specs, fresh) {
    const old = fresh ? [] : drawn;
    const next = specs.map((spec, i) => {
      const text = JSON.stringify(spec);
      let at = old.findIndex(o => o && o.text === text);
      if (at < 0 && spec.kind === 'slider') {            // a slider in the hand is moved, not replaced
        at = old.findIndex(o => o && o.id === spec.id && o.spec.kind === 'slider' && o.node.contains(document.activeElement));
        if (at >= 0) {
          const [range, number] = old[at].node.querySelectorAll('input');
          if (document.activeElement !== range) range.value = spec.value;
          if (document.activeElement !== number) number.value = spec.value;
        }
      }
      if (at >= 0) { const kept = old[at]; old[at] = null; return {...kept, text, spec}; }
      return {text, id: spec.id, spec, node: make(spec)};
    });
    const focus = document.activeElement && body.contains(document.activeElement) ? document.activeElement : null;
    const where = focus ? drawn.findIndex(o => o && o.node.contains(focus)) : -1;
    const scroll = body.scrollTop;
    if (next.some((n, i) => body.children[i] !== n.node) || body.children.length !== next.length) {
      const keep = new Set(next.map(n => n.node));
      [...body.children].forEach(node => { if (!keep.has(node)) node.remove(); });
      next.forEach((n, i) => { if (body.children[i] !== n.node) body.insertBefore(n.node, body.children[i] || null); });
    }
    if (focus && !body.contains(focus) && where >= 0 && !fresh) {   // the same control, drawn anew
      const again = next.find(n => n.id && n.id === drawn[where]?.id);
      again?.node.querySelector('input,select,button')?.focus();
    }
    body.scrollTop = fresh ? 0 : scroll;
    drawn = next;
  }

  let open = null;
  function show() {
    const s = model.get('screen');
    if (!s.tabs) return;
    title.textContent = s.title + (s.unsaved ? ' \u2022' : '');
    title.title = s.unsaved ? 'not saved in its file yet; kept beside it' : 'saved';
    undo.disabled = !s.undo; undo.title = s.undo ? `Take back: ${s.undo}` : 'nothing to take back';
    redo.disabled = !s.redo; redo.title = s.redo ? `Make again: ${s.redo}` : 'nothing to make again';
    copy.disabled = !s.script;
    const known = [...tabs.children].map(t => t.dataset.name).join();
    if (known !== s.tabs.map(t => t[0]).join()) {
      tabs.replaceChildren(...s.tabs.map(([name, text]) => {
        const t = element('button', {type: 'button', textContent: text});
        t.dataset.name = name; t.setAttribute('role', 'tab');
        t.addEventListener('click', () => send({kind: 'tab', to: name}));
        t.addEventListener('keydown', e => {
          const step = {ArrowRight: 1, ArrowLeft: -1}[e.key];
          if (!step) return;
          const all = [...tabs.children];
          const to = all[(all.indexOf(t) + step + all.length) % all.length];
          to.focus(); send({kind: 'tab', to: to.dataset.name}); e.preventDefault();
        });
        return t;
      }));
    }
    for (const t of tabs.children) {
      const on = t.dataset.name === s.tab;
      t.setAttribute('aria-selected', on); t.tabIndex = on ? 0 : -1;
      if (on) body.setAttribute('aria-label', t.textContent);
    }
    message.textContent = s.message; message.classList.toggle('bad', s.bad);
    job.hidden = !s.job;
    if (s.job) {
      const bar = element('progress', s.job.total ? {max: s.job.total, value: s.job.done} : {});
      bar.setAttribute('aria-label', s.job.name);
      let stop = job.querySelector('button');
      if (!stop) { stop = element('button', {type: 'button', textContent: 'Stop'}); stop.addEventListener('click', () => send({kind: 'stop'})); }
      job.replaceChildren(element('span', {textContent: `${s.job.name}${s.job.total ? ` ${s.job.done} of ${s.job.total}` : ''}, ${s.job.s} s`}), bar, stop);
    }
    line.textContent = s.line; line.hidden = !s.line;
    draw(s.controls, open !== s.tab);
    open = s.tab;
    root.dataset.seq = model.get('seq');
  }
  model.on('change:seq', show);
  model.on('msg:custom', (m, buffers) => {           // a file for whoever sits here
    if (m.kind !== 'file') return;
    const link = element('a', {href: URL.createObjectURL(new Blob([buffers[0]])), download: m.name});
    link.click();
    setTimeout(() => URL.revokeObjectURL(link.href), 10000);
  });
  show();
  return () => document.removeEventListener('keydown', undoKeys, true);
}
export default { render };
