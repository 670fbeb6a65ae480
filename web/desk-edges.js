/**
 * The edges of the marks as sliders above the chart, for keyboards and screen readers; a pointer
 * goes
 * through them to the chart.
 */
import { el, part as byPart } from './dom.js';
import * as format from './format.js';
import * as geometry from './geometry.js';

/** @typedef {import('./desk-model.js').DeskModel} DeskModel */

/**
 * @param {DeskModel} model
 * @param {{plot: () => geometry.Plot, onKey: (event: KeyboardEvent) => void}} options onKey: keys
 *     that are not for the edge itself
 */
export function makeEdges(model, { plot, onKey }) {
    const place = byPart('edges');
    /** @type {Map<string, HTMLElement>} */
    const sliders = new Map();

    /** @param {number} id @param {'starts' | 'ends'} edge */
    function make(id, edge) {
        const slider = el('div', { class: 'edge', role: 'slider', tabindex: 0 });
        slider.addEventListener('keydown', (event) => {
            const way = { ArrowLeft: -1, ArrowDown: -1, ArrowRight: 1, ArrowUp: 1 }[event.key];
            if (way === undefined || event.ctrlKey || event.metaKey || event.altKey) {
                onKey(event);
                return;
            }
            event.preventDefault();
            event.stopPropagation();
            model.nudge(id, edge, way * model.nudgeStep(event.shiftKey));
            follow(id, edge);
        });
        slider.addEventListener('keyup', () => model.stepEnd());
        slider.addEventListener('focus', () => {
            model.choose(id);
            follow(id, edge);
        });
        return slider;
    }

    /**
     * Brings the edge into the window and under the loupe.
     * @param {number} id
     * @param {'starts' | 'ends'} edge
     */
    function follow(id, edge) {
        const mark = model.work.said.marks.find((one) => one.id === id);
        if (!mark) return;
        model.showTime(mark[edge]);
        model.setCursor(mark[edge]);
    }

    return {
        /** The sliders there must be, in the order of the marks; the one in use keeps the focus. */
        fill() {
            const focused = document.activeElement;
            const wanted = new Set();
            let before = /** @type {Element | null} */ (null);
            for (const mark of model.work.said.marks)
                for (const edge of /** @type {const} */ (['starts', 'ends'])) {
                    const key = `${mark.id} ${edge}`;
                    wanted.add(key);
                    const slider = sliders.get(key) ?? make(mark.id, edge);
                    sliders.set(key, slider);
                    const next =
                        before === null ? place.firstElementChild : before.nextElementSibling;
                    if (next !== slider) place.insertBefore(slider, next);
                    before = slider;
                    label(slider, model.nameOf(mark), edge, mark[edge]);
                }
            for (const [key, slider] of sliders)
                if (!wanted.has(key)) {
                    slider.remove();
                    sliders.delete(key);
                }
            if (focused instanceof HTMLElement && focused !== document.activeElement)
                if (focused.isConnected) focused.focus();
                else if (focused.classList.contains('edge')) byPart('strip').focus();
        },
        place() {
            const across = plot();
            for (const mark of model.work.said.marks)
                for (const edge of /** @type {const} */ (['starts', 'ends'])) {
                    const slider = sliders.get(`${mark.id} ${edge}`);
                    if (!slider) continue;
                    const x = geometry.timeToX(model.view, across, mark[edge]);
                    const seen = geometry.clamp(x, across.left, across.left + across.width);
                    slider.style.left = `${seen}px`;
                    slider.style.top = `${across.top}px`;
                    slider.style.height = `${across.height}px`;
                }
        },
    };

    /**
     * @param {HTMLElement} slider
     * @param {string} name
     * @param {'starts' | 'ends'} edge
     * @param {number} at
     */
    function label(slider, name, edge, at) {
        slider.setAttribute('aria-label', `Mark ${name} ${edge}`);
        slider.setAttribute('aria-valuemin', String(model.limits.starts));
        slider.setAttribute('aria-valuemax', String(model.limits.ends));
        slider.setAttribute('aria-valuenow', String(at));
        slider.setAttribute('aria-valuetext', `day ${format.time(at)}`);
    }
}
