/** Keeps waiting reviews in IndexedDB, so that a reload or a closed lid loses none. */

/** @typedef {import('./queue.js').Waiting} Waiting */

const NAME = 'ebbmark';
const SHELF = 'waiting-reviews';

/** @template T @param {IDBRequest<T>} request @returns {Promise<T>} */
function done(request) {
    return new Promise((resolve, reject) => {
        request.onsuccess = () => resolve(request.result);
        request.onerror = () => reject(request.error);
    });
}

/** @returns {Promise<IDBDatabase>} */
function openDatabase() {
    const request = indexedDB.open(NAME, 1);
    request.onupgradeneeded = () => {
        request.result.createObjectStore(SHELF, { keyPath: 'key' });
    };
    return done(request);
}

/** @returns {import('./queue.js').Storage} */
export function browserStorage() {
    /** @type {Promise<IDBDatabase> | null} */
    let database = null;
    /**
     * @template T
     * @param {IDBTransactionMode} mode @param {(shelf: IDBObjectStore) => IDBRequest<T>} act
     * @returns {Promise<T>} after the transaction is complete, not only the request
     */
    async function within(mode, act) {
        database ??= openDatabase();
        const transaction = (await database).transaction(SHELF, mode, { durability: 'strict' });
        const complete = new Promise((resolve, reject) => {
            transaction.oncomplete = () => resolve(undefined);
            transaction.onabort = () => reject(transaction.error);
        });
        const result = await done(act(transaction.objectStore(SHELF)));
        await complete;
        return result;
    }
    return {
        all: () => within('readonly', (shelf) => shelf.getAll()),
        put: async (item) => void (await within('readwrite', (shelf) => shelf.put(item))),
        remove: async (key) => void (await within('readwrite', (shelf) => shelf.delete(key))),
    };
}
